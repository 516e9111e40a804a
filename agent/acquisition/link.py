"""What all sources with a connection share: reconnect for ever, count, and say each change of state once."""

import abc
import asyncio
import logging
from collections.abc import AsyncIterator, Iterable
from types import TracebackType
from typing import Self

from agent.acquisition.flow import Backoff, ClockOffset, ReadingQueue
from agent.clock import Clock
from agent.records import LinkState, Reading, Receipt, SourceStatus
from agent.siteplan.plan import Source

_LOG = logging.getLogger(__name__)


class LinkLost(Exception):  # noqa: N818 - it says what happened
    """A connection ended or never came about; the message is the cause in words."""


class ReconnectingSource(abc.ABC):
    """A source with one connection that is made again whenever it ends.

    A subclass writes `_attempt`: make one connection, call `_mark_up`, pass readings to `_deliver`, and raise
    `LinkLost` when it ends. It owns nothing that outlives the attempt.
    """

    def __init__(self, source: Source, clock: Clock, *, backoff: Backoff | None = None) -> None:
        self._source = source
        self._clock = clock
        self._backoff = backoff or Backoff()
        self._queue = ReadingQueue()
        self._offset = ClockOffset()
        self._group: asyncio.TaskGroup | None = None
        self._task: asyncio.Task[None] | None = None
        self._state = LinkState.CONNECTING
        self._since = clock.now()
        self._detail = "not tried yet"
        self._up_since: float | None = None  # monotonic
        self._received = 0
        self._rejected = 0
        self._last_rejection = ""
        self._connections = 0

    @property
    def name(self) -> str:
        return self._source.name

    async def __aenter__(self) -> Self:
        if self._group is not None:
            raise RuntimeError("a source is opened once")
        self._group = asyncio.TaskGroup()
        await self._group.__aenter__()
        self._task = self._group.create_task(self._run(), name=f"source {self.name}")
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._queue.close()
        if self._group is None or self._task is None:
            raise RuntimeError("a source is opened before it is closed")
        del kind, error, trace  # what ended the body leaves it unchanged, not wrapped in a group
        self._task.cancel()
        await self._group.__aexit__(None, None, None)

    async def __aiter__(self) -> AsyncIterator[tuple[Reading, ...]]:
        while batch := await self._queue.take():
            yield batch

    @abc.abstractmethod
    def acknowledge(self, receipts: Iterable[Receipt]) -> None:
        """Tell the plant that these messages are committed."""

    def status(self) -> SourceStatus:
        notes = self._notes()
        return SourceStatus(
            source=self.name,
            state=self._state,
            since=self._since,
            detail="; ".join((self._detail, *notes)),
            received=self._received,
            rejected=self._rejected,
            last_rejection=self._last_rejection,
            dropped=self._queue.dropped,
            connections=self._connections,
            clock_offset_s=self._offset.value_s,
        )

    # for subclasses

    @abc.abstractmethod
    async def _attempt(self, number: int) -> None:
        """One connection, from nothing to its end; ``number`` counts attempts from 1."""

    def _notes(self) -> tuple[str, ...]:
        """What else a reader of the status should know."""
        return ()

    def _mark_up(self, detail: str) -> None:
        self._connections += 1
        self._up_since = self._clock.monotonic()
        self._change(LinkState.UP, detail)

    def _deliver(self, reading: Reading, *, times_the_clock: bool = True) -> None:
        self._received += 1
        if times_the_clock:
            self._offset.update(reading.received_time, reading.source_time)
        self._queue.put(reading)

    def _reject(self, address: str, reason: str) -> None:
        self._received += 1
        self._rejected += 1
        self._last_rejection = f"{address}: {reason}"

    # the loop

    async def _run(self) -> None:
        number = 0
        while True:
            number += 1
            self._up_since = None
            try:
                await self._attempt(number)
                cause = "the connection ended"
            except LinkLost as lost:
                cause = str(lost)
            except Exception as error:  # noqa: BLE001 - whatever a library raises, the source tries again and says why
                cause = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
            connected_s = 0.0 if self._up_since is None else self._clock.monotonic() - self._up_since
            self._change(LinkState.DOWN, cause)
            await asyncio.sleep(self._backoff.wait_s(connected_s=connected_s))

    def _change(self, state: LinkState, detail: str) -> None:
        """Enter a state; one log line per change of it, none for one more failed attempt."""
        self._detail = detail
        if state is self._state:
            return
        self._state = state
        self._since = self._clock.now()
        level = logging.WARNING if state is LinkState.DOWN else logging.INFO
        _LOG.log(level, "source %s is %s: %s", self.name, state.value, detail)
