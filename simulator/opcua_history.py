"""The past hour of every tag, for clients that read history over OPC UA. Fixed memory: 20 bytes a value."""

from array import array
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from typing import Any, Final

from asyncua import ua
from asyncua.server.history import HistoryStorageInterface

KEPT: Final = 3600  # values of each tag, one a second
_EVER: Final = 1e12


class Ring:
    """The last values of one tag; the oldest give way."""

    def __init__(self, kind: ua.VariantType, size: int = KEPT) -> None:
        self._kind = kind
        self._size = size
        self._count = 0
        self._times = array("d", bytes(8 * size))
        self._values = array("d", bytes(8 * size))  # a word is its place in the list
        self._codes = array("I", bytes(4 * size))
        self._words: list[str] = []

    def put(self, time: float, value: float | bool | str, code: int) -> None:
        place = self._count % self._size
        self._times[place], self._values[place], self._codes[place] = time, self._number(value), code
        self._count += 1

    def between(self, low: float, high: float, *, newest_first: bool) -> Iterator[tuple[float, ua.DataValue]]:
        """Values from ``low`` to ``high`` [s], both included, in the order of their times.

        They are put in another order where a link was late or kept its past.
        """
        order = range(max(0, self._count - self._size), self._count)
        places = [number % self._size for number in order]
        wanted = [place for place in places if low <= self._times[place] <= high]
        for place in sorted(wanted, key=self._times.__getitem__, reverse=newest_first):
            yield self._times[place], self._data_value(place)

    def _data_value(self, place: int) -> ua.DataValue:
        when = ua.DateTime.fromtimestamp(self._times[place], UTC)
        return ua.DataValue(
            ua.Variant(self._value(self._values[place]), self._kind),
            StatusCode=ua.StatusCode(ua.UInt32(self._codes[place])),
            SourceTimestamp=when,
            ServerTimestamp=when,
        )

    def _number(self, value: float | bool | str) -> float:
        if not isinstance(value, str):
            return float(value)
        if value not in self._words:
            self._words.append(value)
        return float(self._words.index(value))

    def _value(self, number: float) -> float | bool | str:
        if self._kind is ua.VariantType.String:
            return self._words[int(number)]
        return bool(number) if self._kind is ua.VariantType.Boolean else number


class HourOfHistory(HistoryStorageInterface):
    """What the server reads from. The plant puts values in itself, so that none is missed."""

    def __init__(self) -> None:
        super().__init__()
        self._rings: dict[ua.NodeId, Ring] = {}

    def add(self, node: ua.NodeId, kind: ua.VariantType) -> None:
        self._rings[node] = Ring(kind)

    def put(self, node: ua.NodeId, time: float, value: ua.DataValue) -> None:
        content, status = value.Value, value.StatusCode
        if content is None or status is None:
            raise ValueError("history keeps whole values")
        self._rings[node].put(time, content.Value, int(status.value))

    async def read_node_history(
        self, node_id: ua.NodeId, start: datetime | None, end: datetime | None, nb_values: int
    ) -> tuple[list[ua.DataValue], datetime | None]:
        """Values between two times; the later one first means newest first, and so does no start.

        Returns
        -------
        tuple
            The values, and the time at which to go on if more were asked for than are given.
        """
        ring = self._rings.get(node_id)
        if ring is None:
            return [], None
        first, last = _unix(start), _unix(end)
        newest_first = first is None or (last is not None and first > last)
        low, high = sorted((-_EVER if first is None else first, _EVER if last is None else last))
        limit = min(nb_values or self.max_history_data_response_size, self.max_history_data_response_size)
        found: list[ua.DataValue] = []
        for time, value in ring.between(low, high, newest_first=newest_first):
            if len(found) == limit:
                # Going on needs a start, which the server puts in place of the first one.
                return found, None if first is None else ua.DateTime.fromtimestamp(time, UTC)
            found.append(value)
        return found, None

    async def init(self) -> None:
        """Nothing to open."""

    async def stop(self) -> None:
        """Nothing to close."""

    async def new_historized_node(self, node_id: ua.NodeId, period: timedelta | None, count: int = 0) -> None:
        raise NotImplementedError

    async def save_node_value(self, node_id: ua.NodeId, datavalue: ua.DataValue) -> None:
        raise NotImplementedError

    async def new_historized_event(
        self, source_id: ua.NodeId, evtypes: list[Any], period: timedelta | None, count: int = 0
    ) -> None:
        raise NotImplementedError

    async def save_event(self, event: Any) -> None:
        raise NotImplementedError

    async def read_event_history(
        self,
        source_id: ua.NodeId,
        start: datetime | None,
        end: datetime | None,
        nb_values: int,
        evfilter: ua.EventFilter,
    ) -> tuple[list[Any], datetime | None]:
        """There are no events."""
        del source_id, start, end, nb_values, evfilter
        return [], None


def _unix(moment: datetime | None) -> float | None:
    """Seconds since 1970; a time that is not given comes as the first day the protocol can name."""
    if moment is None or moment.year <= 1601:
        return None
    aware = moment if moment.tzinfo is not None else moment.replace(tzinfo=UTC)
    return aware.timestamp()
