"""What all MQTT sources share: one connection, its thread, its end. Subscribes and acknowledges, no more."""

import abc
import asyncio
import contextlib
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from types import TracebackType
from typing import Any, Final, Generic, TypeVar
from urllib.parse import urlsplit

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags, MQTTErrorCode, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from agent.acquisition.link import LinkLost, ReconnectingSource
from agent.clock import Clock
from agent.siteplan.plan import MqttVersion, Source

RECEIVE_MAXIMUM: Final = 5000

_DEFAULT_PORT: Final = 1883
_KEEPALIVE_S: Final = 5  # a silent broker is noticed after twice this
_CONNECT_TIMEOUT_S: Final = 2.0
_AT_LEAST_ONCE: Final = 1

Parcel = TypeVar("Parcel")  # what a source makes of a message in the thread


@dataclass(frozen=True, slots=True, kw_only=True)
class Message:
    """What the broker sent."""

    topic: str  # "" if it is not UTF-8
    payload: bytes
    retained: bool
    received_time: float


@dataclass(eq=False, slots=True, kw_only=True)
class Link:
    """One connection: its number, its client and the messages that wait for their acknowledgement."""

    number: int
    client: Client
    waiting: set[int] = field(default_factory=set)
    answered: bool = False
    cause: str = ""
    closing: bool = False

    def end(self, cause: str) -> None:
        """The first cause is the one that counts."""
        self.cause = self.cause or cause
        self.closing = True

    def settle(self, number: int | None) -> None:
        """Acknowledge a message, once; None is one that asks for no acknowledgement."""
        if number is not None and number in self.waiting:
            self.waiting.discard(number)
            self.client.ack(number, _AT_LEAST_ONCE)


class MqttSource(ReconnectingSource, Generic[Parcel]):
    """A source on a broker. A subclass writes `_read` and `_take`.

    Parameters
    ----------
    session_expiry_s : int
        How long the broker keeps what is not acknowledged while nobody is connected; 0 for no session [s].
    """

    def __init__(self, source: Source, topics: Sequence[str], clock: Clock, *, session_expiry_s: int) -> None:
        super().__init__(source, clock)
        address = urlsplit(source.address)
        if address.scheme != "mqtt" or not address.hostname:
            raise ValueError(f"source {source.name}: {source.address!r} is not mqtt://host:port")
        if not source.client_id:
            raise ValueError(f"source {source.name}: a session needs a client id")
        if not topics:
            raise ValueError(f"source {source.name}: there is no topic to subscribe to")
        self._host = address.hostname
        self._port = address.port or _DEFAULT_PORT
        self._topics = tuple(topics)
        self._session_expiry_s = session_expiry_s
        self._is_v5 = source.mqtt_version is MqttVersion.V5
        self._link: Link | None = None
        # The network loop has a thread of its own, so that it never waits for one of the loop's workers.
        self._thread = ThreadPoolExecutor(max_workers=1, thread_name_prefix=f"source {source.name}")

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            await super().__aexit__(kind, error, trace)
        finally:
            self._thread.shutdown(wait=False)

    # for subclasses

    @abc.abstractmethod
    def _read(self, message: Message) -> Parcel:
        """In the thread: what is in a message."""

    @abc.abstractmethod
    def _take(self, link: Link, number: int | None, parcel: Parcel) -> None:
        """In the event loop: pass it on. A message with a number waits for `Link.settle`."""

    def _begun(self) -> None:
        """In the event loop: a connection is made, and no message of it has arrived yet."""

    # one connection

    async def _attempt(self, number: int) -> None:
        loop = asyncio.get_running_loop()
        link = Link(number=number, client=self._new_client())
        self._hook(link, loop)
        self._link = link
        serving = loop.run_in_executor(self._thread, self._serve, link)
        try:
            await asyncio.shield(serving)
        except OSError as error:
            reason = error.strerror or str(error)
            raise LinkLost(f"no connection to {self._host}:{self._port}: {reason}") from None
        finally:
            self._link = None
            link.end("closed by the agent")
            link.client.disconnect()  # also wakes the thread
            with contextlib.suppress(OSError):
                await serving
            _unhook(link.client)
        raise LinkLost(link.cause)

    def _new_client(self) -> Client:
        client = Client(
            CallbackAPIVersion.VERSION2,
            client_id=self._source.client_id,
            clean_session=None if self._is_v5 else not self._session_expiry_s,
            protocol=MQTTProtocolVersion.MQTTv5 if self._is_v5 else MQTTProtocolVersion.MQTTv311,
            reconnect_on_failure=False,
            manual_ack=True,
        )
        client.connect_timeout = _CONNECT_TIMEOUT_S
        return client

    def _serve(self, link: Link) -> None:
        """In the thread: one connection from its start to its end."""
        client = link.client
        if self._is_v5:
            properties = Properties(PacketTypes.CONNECT)  # type: ignore[no-untyped-call]  # paho's own
            properties.SessionExpiryInterval = self._session_expiry_s
            properties.ReceiveMaximum = RECEIVE_MAXIMUM
            clean = not self._session_expiry_s
            client.connect(self._host, self._port, _KEEPALIVE_S, clean_start=clean, properties=properties)
        else:
            client.connect(self._host, self._port, _KEEPALIVE_S)
        code = MQTTErrorCode.MQTT_ERR_SUCCESS
        while code == MQTTErrorCode.MQTT_ERR_SUCCESS and not link.closing:
            code = client.loop(timeout=1.0)
        client.disconnect()
        client.loop(timeout=0.1)  # lets the farewell out

    def _hook(self, link: Link, loop: asyncio.AbstractEventLoop) -> None:
        """Connect the thread's callbacks to methods that run in the event loop."""
        client, post = link.client, loop.call_soon_threadsafe

        def on_connect(
            _c: Client, _u: Any, _f: ConnectFlags, code: ReasonCode, _p: Properties | None
        ) -> None:
            link.answered = True
            if code.is_failure:
                link.end(f"the broker refused the connection: {code}")
            else:
                post(self._begun)
                client.subscribe([(topic, _AT_LEAST_ONCE) for topic in self._topics])

        def on_subscribe(
            _c: Client, _u: Any, _m: int, codes: list[ReasonCode], _p: Properties | None
        ) -> None:
            refused = [t for t, code in zip(self._topics, codes, strict=False) if code.is_failure]
            if refused:
                link.end(f"the broker refused the subscription to {', '.join(refused)}")
            else:
                post(self._subscribed)

        def on_disconnect(
            _c: Client, _u: Any, flags: DisconnectFlags, code: ReasonCode, _p: Properties | None
        ) -> None:
            if not link.answered:
                link.end(f"the broker does not answer to MQTT {self._source.mqtt_version.value}")
            elif flags.is_disconnect_packet_from_server:
                link.end(f"the broker ended the connection: {code}")
            else:
                link.end(f"connection lost: {code}")

        def on_message(_c: Client, _u: Any, raw: MQTTMessage) -> None:
            message = Message(
                topic=_topic(raw),
                payload=bytes(raw.payload),
                retained=raw.retain,
                received_time=self._clock.now(),
            )
            post(self._arrived, link, raw.mid if raw.qos else None, self._read(message))

        client.on_connect = on_connect
        client.on_subscribe = on_subscribe
        client.on_disconnect = on_disconnect
        client.on_message = on_message
        # With this set, ack() leaves the writing to the thread instead of writing beside it.
        client.on_socket_register_write = _leave_to_the_thread

    def _subscribed(self) -> None:
        version = self._source.mqtt_version.value
        self._mark_up(f"connected to {self._host}:{self._port} by MQTT {version}")

    def _arrived(self, link: Link, number: int | None, parcel: Parcel) -> None:
        if number is not None:
            link.waiting.add(number)
        self._take(link, number, parcel)


def _topic(message: MQTTMessage) -> str:
    try:
        return message.topic
    except UnicodeDecodeError:
        return ""


def _leave_to_the_thread(_client: Client, _userdata: Any, _socket: Any) -> None:
    """The thread is woken by the client itself."""


def _unhook(client: Client) -> None:
    """Break the circle of client and callbacks, so that the client closes its wake-up sockets at once."""
    client.on_connect = None
    client.on_subscribe = None
    client.on_disconnect = None
    client.on_message = None
    client.on_socket_register_write = None
