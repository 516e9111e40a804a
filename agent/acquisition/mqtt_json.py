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

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Final

from agent.acquisition.json_payload import decode
from agent.acquisition.mqtt_link import Link, Message, MqttSource
from agent.acquisition.rejection import Rejection
from agent.clock import Clock
from agent.records import Reading, Receipt
from agent.siteplan.plan import Input, Source

SESSION_EXPIRY_S: Final = 86_400
BROKER_WINDOW: Final = 20  # messages in flight on 3.1.1, the default of Mosquitto

_AHEAD_S: Final = 0.5

# Whose message it is and what is in it; nothing for a topic of no input.
_Parcel = tuple[Input | None, Reading | Rejection | None]


class MqttJsonSource(MqttSource[_Parcel]):
    def __init__(self, source: Source, inputs: Sequence[Input], clock: Clock) -> None:
        super().__init__(source, source.topics, clock, session_expiry_s=SESSION_EXPIRY_S)
        self._inputs: Mapping[str, Input] = {i.address: i for i in inputs}
        self._ahead = 0

    def acknowledge(self, receipts: Iterable[Receipt]) -> None:
        link = self._link
        for receipt in receipts:
            if link is not None and receipt.source == self.name and receipt.connection == link.number:
                link.settle(receipt.message)

    def _notes(self) -> tuple[str, ...]:
        notes = []
        if not self._is_v5 and self._link is not None and len(self._link.waiting) >= BROKER_WINDOW:
            notes.append(
                f"{len(self._link.waiting)} messages wait for a commit, the broker may hold back more"
            )
        if self._ahead:
            notes.append(f"{self._ahead} readings dated ahead were acknowledged before their tick")
        return tuple(notes)

    def _read(self, message: Message) -> _Parcel:
        entry = self._inputs.get(message.topic)
        if entry is None:
            return None, None
        return entry, decode(message.payload, entry, self._source, message.received_time)

    def _take(self, link: Link, number: int | None, parcel: _Parcel) -> None:
        """Pass one message on, or acknowledge it at once."""
        entry, outcome = parcel
        if entry is None or outcome is None:
            link.settle(number)
        elif isinstance(outcome, Rejection):
            link.settle(number)
            self._reject(entry.address, outcome.reason)
        else:
            if number is not None and not self._is_v5 and _is_ahead(outcome):
                self._ahead += 1
                link.settle(number)
                number = None
            if number is not None:
                receipt = Receipt(source=self.name, connection=link.number, message=number)
                outcome = replace(outcome, receipt=receipt)
            self._deliver(outcome, times_the_clock=not entry.on_change)


def _is_ahead(reading: Reading) -> bool:
    return reading.source_time > reading.received_time + _AHEAD_S
