"""Dialect `bm`: `42 4D`, lengths 20, 28 and 36, recognised by the length word. 9600 8N1, streams once a second.

Owns its three layouts. Layouts from memory, common practice.

    length 20   six masses, two spare words, revision and error
    length 28   six masses, six counts, revision and error
    length 36   six masses, six counts, a gas word, temperature x10 (signed), humidity x10, a spare, revision and error
"""

from typing import Final

from motekeep.wire.frame import Dialect, Layout
from motekeep.wire.framed import COMMANDS, COUNT_TOP, DECLARED_TOP, START, Form, FramedDecoder, encoder

MASS = ("pm1", "pm2_5", "pm10")
SIZES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)

BM_20: Final = Layout("bm-20", MASS, 1.0, DECLARED_TOP, ambient=True)
BM_28: Final = Layout("bm-28", MASS, 1.0, DECLARED_TOP, SIZES_UM, COUNT_TOP, ambient=True)
BM_36: Final = Layout("bm-36", MASS, 1.0, DECLARED_TOP, SIZES_UM, COUNT_TOP, ambient=True, climate=True)

FORMS: Final = (
    Form(BM_20, "6H4xBB"),
    Form(BM_28, "12HBB"),
    Form(BM_36, "12H2xhH2xBB", climate_at=12),
)


def decoder() -> FramedDecoder:
    return FramedDecoder(FORMS)


DIALECT: Final = Dialect(
    name="bm",
    baud=9600,
    polled=False,
    layouts=(BM_20, BM_28, BM_36),
    decoder=decoder,
    encode=encoder(FORMS),
    commands=COMMANDS,
    start=START,
    warm_up_s=30.0,
    longest=40,
)
