"""One connection to the broker: a paho-mqtt client of its own, its callbacks, and why it ended.

Owns will, subscriptions, and the translation of paho's callbacks into events. Must not know what a message
means, nor when to connect again. Callbacks run on paho's network thread; they only put events into the inlet.

A client lives as long as its connection and is then thrown away. paho would send its unacknowledged messages again by
itself, an oversized one for ever, and its in-flight counters leak when its thread dies; a new client has neither
trouble, and password and certificates are read anew for each. paho's own reconnection is off: it has no jitter.
"""

import socket
import ssl
import sys
import threading
from collections.abc import Callable
from contextlib import suppress
from functools import wraps
from queue import Empty, SimpleQueue
from typing import Any, ParamSpec

import paho.mqtt.client as mqtt
import structlog
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode
from paho.mqtt.subscribeoptions import SubscribeOptions

from motekeep.edges.login import DOWN_BYTES, BrokerSettings, read_password, tls_context
from motekeep.edges.ports import (
    Acknowledged,
    BrokerEvent,
    Clock,
    Connected,
    Disconnected,
    Received,
    SubscriptionRefused,
)
from motekeep.errors import BrokerError

log = structlog.get_logger()

NO_LIMIT = 65_535  # MQTT 5 section 3.2.2.3.3: what an absent Receive Maximum means

P = ParamSpec("P")


class Inlet:
    """Events on their way from the network thread to the publisher's.

    Acknowledgements are bounded by the publisher's window, the rest by `limit_bytes`.
    """

    def __init__(self, limit_bytes: int) -> None:
        self._limit_bytes = limit_bytes
        self._queue: SimpleQueue[BrokerEvent | None] = SimpleQueue()
        self._bytes_in = 0  # written by the network thread only
        self._bytes_out = 0  # written by the publisher's only
        self._woken = False
        self.lost = 0

    def put(self, event: BrokerEvent) -> None:
        if isinstance(event, Received):
            size = len(event.topic) + len(event.payload)
            if self._bytes_in - self._bytes_out + size > self._limit_bytes:
                self.lost += 1
                return
            self._bytes_in += size
        self._queue.put(event)

    def wake(self) -> None:
        if not self._woken:
            self._woken = True
            self._queue.put(None)

    def take(self, timeout_s: float) -> BrokerEvent | None:
        try:
            event = self._queue.get(timeout=timeout_s) if timeout_s > 0 else self._queue.get_nowait()
        except Empty:
            return None
        if event is None:
            self._woken = False
        elif isinstance(event, Received):
            self._bytes_out += len(event.topic) + len(event.payload)
        return event


def _safely(callback: Callable[P, None]) -> Callable[P, None]:
    """An exception in a callback would end paho's thread without a word; here it is a bug that is logged instead."""

    @wraps(callback)
    def guarded(*args: P.args, **kwargs: P.kwargs) -> None:
        try:
            callback(*args, **kwargs)
        except Exception:  # whatever it was, the network thread must live; the watch on progress does the rest
            log.exception("link.callback_failed", callback=callback.__name__)

    return guarded


class Connection:
    """Begins to connect at once. `number` counts the connections of this process."""

    def __init__(self, settings: BrokerSettings, number: int, inlet: Inlet, clock: Clock) -> None:
        self._settings = settings
        self._number = number
        self._inlet = inlet
        self._clock = clock
        self._subscribed: dict[int, tuple[str, ...]] = {}
        self._telling = threading.Lock()
        self._leaving = False
        self._trouble = ""  # what paho last said of the socket; it tells no callback
        self.over = threading.Event()
        self.up_since: float | None = None
        self.began_s = clock.now().boot_s
        self._client = self._make_client()
        self._client.connect_async(
            settings.host,
            settings.port,
            keepalive=settings.keepalive_s,
            clean_start=settings.will is None,
            properties=self._connect_properties(),
        )
        self._client.loop_start()  # never an own thread around loop_forever: then two threads would write the socket

    @property
    def alive(self) -> bool:
        """Whether paho's network thread runs; `is_connected` would still say yes without one."""
        return self._client._thread is not None  # noqa: SLF001 (there is no public way to see it)

    def publish(self, topic: str, body: str, retain: bool) -> int | None:
        if self.up_since is None or self.over.is_set():
            return None  # paho would queue it in memory
        try:
            info = self._client.publish(topic, body.encode(), qos=1, retain=retain)
        except ValueError as error:
            raise BrokerError(f"publishing on {topic!r}", str(error), "mend the names in the configuration") from error
        return self._event_id(info.mid) if info.rc is mqtt.MQTT_ERR_SUCCESS else None

    def _event_id(self, mid: int) -> int:
        """Message ids begin anew with each client; with the number of the link they are unique in this process."""
        return self._number << 16 | mid

    def say(self, topic: str, body: str, within_s: float) -> bool:
        """Publish a last retained message and wait for the answer to it."""
        if self.up_since is None or self.over.is_set():
            return False
        info = self._client.publish(topic, body.encode(), qos=1, retain=True)
        try:
            info.wait_for_publish(within_s)
            return info.is_published()
        except (RuntimeError, ValueError):  # the link broke meanwhile
            return False

    def leave(self, within_s: float) -> None:
        """Disconnect so that the broker discards the will and the session, or cut when that takes too long."""
        properties = _properties(PacketTypes.DISCONNECT, SessionExpiryInterval=0)
        self._leaving = True
        if self.up_since is not None:
            self._client.disconnect(properties=properties)
            self.over.wait(within_s)
        self.cut("stopped")

    def cut(self, why: str) -> None:
        """End it from outside: the thread sees its socket close and ends by itself."""
        self.tell(why)
        _shut(self._client.socket())

    def release(self) -> None:
        """Let go of the client, once its thread has ended. Its callbacks hold us and we hold it, so its sockets would
        stay open until the cycle collector comes by, which on a quiet gateway is after a hundred attempts or more."""
        client = self._client
        client.on_socket_open = client.on_connect = client.on_connect_fail = client.on_disconnect = None
        client.on_publish = client.on_message = client.on_subscribe = client.on_log = None

    def tell(self, why: str, *, refused: bool = False) -> None:
        """Report the end of this link, once: paho reports some ends twice and others never."""
        with self._telling:
            if self.over.is_set():
                return
            self.over.set()
        self._inlet.put(Disconnected(why, refused))

    # -- the client ---------------------------------------------------------------------------------------------

    def _make_client(self) -> mqtt.Client:
        settings = self._settings
        client = mqtt.Client(
            CallbackAPIVersion.VERSION2, settings.client_id, protocol=mqtt.MQTTv5, reconnect_on_failure=False
        )
        client.suppress_exceptions = True
        client.max_inflight_messages_set(0)  # the publisher keeps the window; paho's would queue behind our back
        client.max_queued_messages_set(NO_LIMIT)
        if settings.username is not None:
            client.username_pw_set(settings.username, read_password(settings.password_file))
        if settings.tls is not None:
            client.tls_set_context(tls_context(settings.tls))
        if settings.will is not None:
            will = _properties(PacketTypes.WILLMESSAGE, WillDelayInterval=settings.will_delay_s)
            client.will_set(*settings.will, qos=1, retain=True, properties=will)
        client.on_log = _safely(self._logged)
        client.on_socket_open = _safely(self._opened)
        client.on_connect = _safely(self._connected)
        client.on_connect_fail = _safely(self._connect_failed)
        client.on_disconnect = _safely(self._disconnected)
        client.on_publish = _safely(self._published)
        client.on_message = _safely(self._received)
        client.on_subscribe = _safely(self._subscribe_answered)
        return client

    def _connect_properties(self) -> Properties:
        """The session outlives the link only for this: a broker sends the will when its session ends, so a link that is
        back within the delay causes no `offline`. Nothing else is kept in it; rows are sent again from the journal."""
        expiry_s = 0 if self._settings.will is None else self._settings.will_delay_s + 30
        return _properties(PacketTypes.CONNECT, SessionExpiryInterval=expiry_s, MaximumPacketSize=DOWN_BYTES)

    # -- callbacks ----------------------------------------------------------------------------------------------

    def _opened(self, _client: mqtt.Client, _userdata: Any, sock: Any) -> None:  # Any: paho's own type here
        if self.over.is_set():  # given up while it hung in a name look-up: must not take the session over
            _shut(sock)
            return
        sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        # Unacknowledged bytes end the connection as soon as paho's keepalive ends an idle one (tcp(7)).
        if hasattr(socket, "TCP_USER_TIMEOUT"):  # Linux; this file also serves the operator's workstation
            sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_USER_TIMEOUT, 2000 * self._settings.keepalive_s)

    def _logged(self, _client: mqtt.Client, _userdata: Any, level: int, text: str) -> None:
        if level == mqtt.MQTT_LOG_ERR:
            self._trouble = text.removeprefix("failed to receive on socket: ")

    def _connected(
        self,
        client: mqtt.Client,
        _userdata: Any,
        _flags: mqtt.ConnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        if reason.is_failure:
            self.tell(_refused_connection(reason), refused=True)
            return
        if self._settings.filters:
            options = SubscribeOptions(qos=self._settings.filter_qos)
            _, mid = client.subscribe([(name, options) for name in self._settings.filters])
            if mid is not None:
                self._subscribed[mid] = self._settings.filters
        receive_maximum = int(getattr(properties, "ReceiveMaximum", NO_LIMIT))
        maximum_packet = getattr(properties, "MaximumPacketSize", None)
        self.up_since = self._clock.now().boot_s
        self._inlet.put(Connected(receive_maximum, maximum_packet))

    def _connect_failed(self, _client: mqtt.Client, _userdata: Any) -> None:
        error = sys.exc_info()[1]  # paho calls this from its except clause and hands nothing over
        self.tell(_connect_error(error))

    def _disconnected(
        self,
        _client: mqtt.Client,
        _userdata: Any,
        flags: mqtt.DisconnectFlags,
        reason: ReasonCode,
        _properties: Properties | None,
    ) -> None:
        if self._leaving:
            self.tell("stopped")
        elif flags.is_disconnect_packet_from_server:
            self.tell(f"the broker ended it: {_words(reason)}")
        elif self.up_since is None and "alert" in self._trouble:  # TLS 1.3 refuses a client after the handshake
            why = f"the broker refuses our certificate{self._said()}"
            self.tell(f"{why}; look at [broker] tls.cert and tls.key", refused=True)
        elif self.up_since is None:
            said = self._said()
            self.tell(
                f"the broker closed it before answering{said}; does it speak MQTT 5 on this port, with or without TLS?"
            )
        elif reason.getName() == "Keep alive timeout":
            self.tell(f"no sign of life from the broker for {2 * self._settings.keepalive_s} s")
        else:
            self.tell(f"the connection broke{self._said()}")

    def _said(self) -> str:
        return f" ({self._trouble})" if self._trouble else ""

    def _published(
        self, _client: mqtt.Client, _userdata: Any, mid: int, reason: ReasonCode, _properties: Properties | None
    ) -> None:
        if self.over.is_set():
            return
        refusal = _words(reason) if reason.is_failure else None
        self._inlet.put(Acknowledged(self._event_id(mid), refusal, reason.value))

    def _received(self, _client: mqtt.Client, _userdata: Any, message: mqtt.MQTTMessage) -> None:
        if not self.over.is_set():
            self._inlet.put(Received(message.topic, bytes(message.payload), message.retain))

    def _subscribe_answered(
        self, _client: mqtt.Client, _userdata: Any, mid: int, reasons: list[ReasonCode], _properties: Properties | None
    ) -> None:
        for name, reason in zip(self._subscribed.pop(mid, ()), reasons, strict=False):
            if reason.is_failure:
                self._inlet.put(SubscriptionRefused(name, _words(reason)))


def _properties(packet: int, **values: int) -> Properties:
    properties = Properties(packet)  # type: ignore[no-untyped-call]  # paho leaves it untyped
    for name, value in values.items():
        setattr(properties, name, value)
    return properties


def _words(reason: ReasonCode) -> str:
    return f"{reason.getName().lower()} ({reason.value})"


def _refused_connection(reason: ReasonCode) -> str:
    match reason.getName():
        case "Unsupported protocol version":
            return "this broker speaks only MQTT 3.1.1, which hides refusals; motekeep needs one that speaks MQTT 5"
        case "Bad user name or password" | "Not authorized":
            return (
                f"the broker refuses our login: {_words(reason)}; look at [broker] username, password_file and tls.cert"
            )
    return f"the broker refuses the connection: {_words(reason)}"


def _connect_error(error: BaseException | None) -> str:
    match error:
        case ssl.SSLCertVerificationError():
            return (
                f"the broker's certificate is not trusted: {error.verify_message}; look at [broker] tls.ca and at this "
                "gateway's clock"
            )
        case socket.gaierror():
            return f"the broker's name is not found: {error.strerror}; look at [broker] host and at the network"
        case TimeoutError():
            return "no answer at the broker's address; look at the network"
        case OSError():
            return f"not reachable: {error.strerror or error}"
    return "not reachable"


def _shut(sock: Any) -> None:  # Any: paho's own type, a plain or a TLS socket
    """At the system's level only: SSLSocket.shutdown would pull the TLS object from under the network thread."""
    if isinstance(sock, socket.socket):
        with suppress(OSError):  # closed by then
            socket.socket.shutdown(sock, socket.SHUT_RDWR)
