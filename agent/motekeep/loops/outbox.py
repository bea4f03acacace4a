"""The way out to the broker on the connection in force: room, size, handing over.

Owns the window and what the connection allows. Does not know what is sent, nor what an answer means for it.
"""

from motekeep.edges.ports import Broker, Connected
from motekeep.loops.lanes import size
from motekeep.loops.link import LinkLedger
from motekeep.loops.window import Flight, Pace, Way, Window

PACKET_MOST = 268_435_455  # MQTT 5 section 1.5.5: the largest remaining length
TOO_LARGE = "larger than the broker's maximum packet"


class Outbox:
    """Belongs to the publisher's thread."""

    def __init__(self, broker: Broker, ledger: LinkLedger, window: int) -> None:
        self.window: Window | None = None  # None while there is no connection
        self.pace = Pace()
        self.ledger = ledger
        self._broker = broker
        self._window_most = window
        self._packet_most = PACKET_MOST
        self._severed = False

    def opened(self, event: Connected) -> Window:
        self.window = Window(min(self._window_most, event.receive_maximum))
        self.pace = Pace()
        self._packet_most = event.maximum_packet or PACKET_MOST
        self._severed = False
        return self.window

    def closed(self) -> Window | None:
        """The window as it was when the connection ended."""
        window, self.window = self.window, None
        return window

    def full(self) -> bool:
        return self.window is None or self._severed or self.window.full

    def backlog_full(self) -> bool:
        return self.window is None or self._severed or self.window.backlog_full(self.pace)

    def flies(self, way: Way, topic: str) -> bool:
        return self.window is not None and self.window.flies(way, topic)

    def room(self, topic: str) -> int:
        """Bytes of payload that fit into one PUBLISH on `topic`: fixed header of at most 5, topic with its length,
        message id, an empty property list (MQTT 5 section 3.3)."""
        return self._packet_most - (5 + 2 + size(topic) + 2 + 1)

    def send(self, flight: Flight, body: str, *, retain: bool = False) -> bool:
        """Hand one message over; whether it went. Nothing goes any more once one did not."""
        mid = self._broker.publish(flight.topic, body, retain=retain)
        if mid is None or self.window is None:
            self._severed = True
            self._broker.drop("a message could not be handed over")  # mostly Disconnected is on its way already
            return False
        self.window.add(mid, flight)
        self.ledger.in_flight(len(self.window))
        return True
