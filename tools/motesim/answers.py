"""What a sensor says when a command reached it, by dialect. From memory, common practice.

Owns the bytes of acknowledgements; those of data are `line`. Must not know the sensor's state.
"""

from motekeep.wire import aa, stuffed
from motekeep.wire.framed import ANSWER_LENGTH, HEADER, MODE, SLEEP, WORD


def _framed(code: int, parameter: int) -> bytes:
    body = HEADER + ANSWER_LENGTH + bytes([code, parameter])
    return body + WORD.pack(sum(body))


def _tailed(code: int, parameter: int, identity: int) -> bytes:
    payload = bytes([code, 1, parameter, 0]) + identity.to_bytes(2, "big")
    return bytes([0xAA, aa.ANSWER]) + payload + bytes([sum(payload) & 0xFF, aa.TAIL])


def _stuffed(*codes: int) -> bytes:
    return b"".join(stuffed.unit(0, code, 0) for code in codes)


# the state byte of a sensor that was asked for values while it does not measure
NOT_MEASURING = stuffed.unit(0, stuffed.READ_VALUES, 0x43)
NOTHING_NEW = stuffed.unit(0, stuffed.READ_VALUES, 0)


def acknowledgement(dialect: str, command: str, identity: int) -> bytes:
    """The answer to `sleep`, `wake`, `stream` or `poll`; empty where the dialect has none."""
    if dialect == "stuffed":
        codes = {
            "sleep": (stuffed.STOP, stuffed.SLEEP),
            "wake": (stuffed.WAKE, stuffed.START),
            "stream": (stuffed.START,),
        }
        return _stuffed(*codes.get(command, ()))
    if dialect == "aa":
        tailed = {"sleep": (aa.SLEEP, 0), "wake": (aa.SLEEP, 1), "stream": (aa.REPORT, 0), "poll": (aa.REPORT, 1)}
        return _tailed(*tailed[command], identity) if command in tailed else b""
    framed = {"sleep": (SLEEP, 0), "wake": (SLEEP, 1), "stream": (MODE, 1), "poll": (MODE, 0)}
    return _framed(*framed[command]) if command in framed else b""
