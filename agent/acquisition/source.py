"""What every source is to the rest of the agent.

A source is opened with ``async with``, read with ``async for`` and asked for its status. It reconnects by
itself, for ever. It never publishes, writes or calls anything on its connection: it subscribes, reads and
acknowledges.
"""

from collections.abc import AsyncIterator, Iterable
from types import TracebackType
from typing import Protocol, Self

from agent.records import Reading, Receipt, SourceStatus


class PlantSource(Protocol):
    @property
    def name(self) -> str: ...

    async def __aenter__(self) -> Self: ...

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None: ...

    def __aiter__(self) -> AsyncIterator[tuple[Reading, ...]]:
        """Batches of readings, each never empty, as soon as there are any; ends when the source is closed."""
        ...

    def acknowledge(self, receipts: Iterable[Receipt]) -> None:
        """Tell the plant that these messages are committed. Receipts of an earlier connection do nothing."""
        ...

    def status(self) -> SourceStatus: ...
