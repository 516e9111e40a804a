"""Plant tags over MQTT, one topic per tag, a JSON object per message. Subscribes and acknowledges, no more.

Messages are acknowledged by the pipeline once they are committed, so what the broker has confirmed to its
publishers is not lost with the agent: the session is persistent and the broker delivers the rest again. A
message that cannot become a reading is acknowledged at once and counted.

MQTT 5 lets 5,000 messages wait for their acknowledgement. MQTT 3.1.1 has no such word: Mosquitto's default is
20, and behind these it keeps 1,000 and drops the rest unseen. Live readings wait for their tick, a second at
most, so 3.1.1 carries up to about 18 messages a second; late ones are committed as they come and do not wait.
A reading dated ahead of the agent's clock would wait longer: on 3.1.1 it is acknowledged on arrival, since a
crash may then lose it, but a full window would lose readings all day.
"""

import asyncio
import contextlib
from collections.abc import Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from types import TracebackType
from typing import Any, Final
from urllib.parse import urlsplit

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags, MQTTErrorCode, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from agent.acquisition.json_payload import decode
from agent.acquisition.link import LinkLost, ReconnectingSource
from agent.acquisition.rejection import Rejection
from agent.clock import Clock
from agent.records import Reading, Receipt
from agent.siteplan.plan import Input, MqttVersion, Source

RECEIVE_MAXIMUM: Final = 5000
SESSION_EXPIRY_S: Final = 86_400
BROKER_WINDOW: Final = 20  # messages in flight on 3.1.1, the default of Mosquitto

_DEFAULT_PORT: Final = 1883
_KEEPALIVE_S: Final = 5  # a silent broker is noticed after twice this
_CONNECT_TIMEOUT_S: Final = 2.0
_AHEAD_S: Final = 0.5
_AT_LEAST_ONCE: Final = 1


@dataclass(eq=False, slots=True, kw_only=True)
class _Link:
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


class MqttJsonSource(ReconnectingSource):
    def __init__(self, source: Source, inputs: Sequence[Input], clock: Clock) -> None:
        super().__init__(source, clock)
        address = urlsplit(source.address)
        if address.scheme != "mqtt" or not address.hostname:
            raise ValueError(f"source {source.name}: {source.address!r} is not mqtt://host:port")
        if not source.client_id:
            raise ValueError(f"source {source.name}: a persistent session needs a client id")
        if not source.topics:
            raise ValueError(f"source {source.name}: there is no topic to subscribe to")
        self._host = address.hostname
        self._port = address.port or _DEFAULT_PORT
        self._inputs: Mapping[str, Input] = {i.address: i for i in inputs}
        self._is_v5 = source.mqtt_version is MqttVersion.V5
        self._link: _Link | None = None
        self._ahead = 0
        # The network loop has a thread of its own, so that it never waits for one of the loop's workers.
        self._thread = ThreadPoolExecutor(max_workers=1, thread_name_prefix=f"source {source.name}")

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            await super().__aexit__(kind, error, trace)
        finally:
            self._thread.shutdown(wait=False)

    def acknowledge(self, receipts: Iterable[Receipt]) -> None:
        link = self._link
        for receipt in receipts:
            if link is not None and receipt.source == self.name and receipt.connection == link.number:
                self._settle(link, receipt.message)

    def _settle(self, link: _Link, message: int) -> None:
        if message in link.waiting:
            link.waiting.discard(message)
            link.client.ack(message, _AT_LEAST_ONCE)

    def _notes(self, now: float) -> tuple[str, ...]:
        del now
        notes = []
        if not self._is_v5 and self._link is not None and len(self._link.waiting) >= BROKER_WINDOW:
            notes.append(
                f"{len(self._link.waiting)} messages wait for a commit, the broker may hold back more"
            )
        if self._ahead:
            notes.append(f"{self._ahead} readings dated ahead were acknowledged before their tick")
        return tuple(notes)

    # one connection

    async def _attempt(self, number: int) -> None:
        loop = asyncio.get_running_loop()
        link = _Link(number=number, client=self._new_client())
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
            clean_session=None if self._is_v5 else False,
            protocol=MQTTProtocolVersion.MQTTv5 if self._is_v5 else MQTTProtocolVersion.MQTTv311,
            reconnect_on_failure=False,
            manual_ack=True,
        )
        client.connect_timeout = _CONNECT_TIMEOUT_S
        return client

    def _serve(self, link: _Link) -> None:
        """In the thread: one connection from its start to its end."""
        properties = None
        if self._is_v5:
            properties = Properties(PacketTypes.CONNECT)  # type: ignore[no-untyped-call]  # paho's own
            properties.SessionExpiryInterval = SESSION_EXPIRY_S
            properties.ReceiveMaximum = RECEIVE_MAXIMUM
        client = link.client
        if self._is_v5:
            client.connect(self._host, self._port, _KEEPALIVE_S, clean_start=False, properties=properties)
        else:
            client.connect(self._host, self._port, _KEEPALIVE_S)
        code = MQTTErrorCode.MQTT_ERR_SUCCESS
        while code == MQTTErrorCode.MQTT_ERR_SUCCESS and not link.closing:
            code = client.loop(timeout=1.0)
        client.disconnect()
        client.loop(timeout=0.1)  # lets the farewell out

    def _hook(self, link: _Link, loop: asyncio.AbstractEventLoop) -> None:
        """Connect the thread's callbacks to methods that run in the event loop."""
        client, post = link.client, loop.call_soon_threadsafe

        def on_connect(
            _c: Client, _u: Any, _f: ConnectFlags, code: ReasonCode, _p: Properties | None
        ) -> None:
            link.answered = True
            if code.is_failure:
                link.end(f"the broker refused the connection: {code}")
            else:
                client.subscribe([(topic, _AT_LEAST_ONCE) for topic in self._source.topics])

        def on_subscribe(
            _c: Client, _u: Any, _m: int, codes: list[ReasonCode], _p: Properties | None
        ) -> None:
            refused = [t for t, code in zip(self._source.topics, codes, strict=False) if code.is_failure]
            if refused:
                link.end(f"the broker refused the subscription to {', '.join(refused)}")
            else:
                version = self._source.mqtt_version.value
                post(self._mark_up, f"connected to {self._host}:{self._port} by MQTT {version}")

        def on_disconnect(
            _c: Client, _u: Any, flags: DisconnectFlags, code: ReasonCode, _p: Properties | None
        ) -> None:
            if not link.answered:
                link.end(f"the broker does not answer to MQTT {self._source.mqtt_version.value}")
            elif flags.is_disconnect_packet_from_server:
                link.end(f"the broker ended the connection: {code}")
            else:
                link.end(f"connection lost: {code}")

        def on_message(_c: Client, _u: Any, message: MQTTMessage) -> None:
            entry, outcome = self._read(message)
            post(self._take, link, message.mid if message.qos else None, entry, outcome)

        client.on_connect = on_connect
        client.on_subscribe = on_subscribe
        client.on_disconnect = on_disconnect
        client.on_message = on_message
        # With this set, ack() leaves the writing to the thread instead of writing beside it.
        client.on_socket_register_write = _leave_to_the_thread

    def _read(self, message: MQTTMessage) -> tuple[Input | None, Reading | Rejection | None]:
        """In the thread: whose message it is and what is in it; nothing for a topic of no input."""
        received_time = self._clock.now()
        try:
            entry = self._inputs.get(message.topic)
        except UnicodeDecodeError:
            entry = None
        if entry is None:
            return None, None
        return entry, decode(bytes(message.payload), entry, self._source, received_time)

    def _take(
        self, link: _Link, message: int | None, entry: Input | None, outcome: Reading | Rejection | None
    ) -> None:
        """In the event loop: pass one message on, or acknowledge it at once."""
        if message is not None:
            link.waiting.add(message)
        if entry is None or outcome is None:
            self._settle_now(link, message)
        elif isinstance(outcome, Rejection):
            self._settle_now(link, message)
            self._reject(entry.address, outcome.reason)
        else:
            if message is not None and not self._is_v5 and _is_ahead(outcome):
                self._ahead += 1
                self._settle_now(link, message)
                message = None
            if message is not None:
                receipt = Receipt(source=self.name, connection=link.number, message=message)
                outcome = replace(outcome, receipt=receipt)
            self._deliver(outcome, times_the_clock=not entry.on_change)

    def _settle_now(self, link: _Link, message: int | None) -> None:
        if message is not None:
            self._settle(link, message)


def _is_ahead(reading: Reading) -> bool:
    return reading.source_time > reading.received_time + _AHEAD_S


def _leave_to_the_thread(_client: Client, _userdata: Any, _socket: Any) -> None:
    """The thread is woken by the client itself."""


def _unhook(client: Client) -> None:
    """Break the circle of client and callbacks, so that the client closes its wake-up sockets at once."""
    client.on_connect = None
    client.on_subscribe = None
    client.on_disconnect = None
    client.on_message = None
    client.on_socket_register_write = None
