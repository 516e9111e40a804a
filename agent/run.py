"""Composition root of the agent: opens the stores, starts the sources, keeps the tick, ends in order."""

import asyncio
import contextlib
import logging
import signal
import sys
from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Final

from agent.acquisition.build import build_source
from agent.acquisition.source import PlantSource
from agent.clock import Clock, SystemClock
from agent.database import CACHE_FOLDER, JOURNAL_FILE, SERIES_FILE, StoreError
from agent.journal.sqlite import JournalReader, JournalWriter
from agent.lock import FolderInUseError, only_agent
from agent.pipeline import Pipeline, input_columns, result_columns
from agent.records import Reading, Receipt
from agent.siteplan.plan import SitePlan
from agent.storage.sqlite_series import SeriesReader, SeriesWriter
from agent.unit_line import UnitLine
from model.gas import load_or_build
from model.surface import GasSurface

_log = logging.getLogger(__name__)

INBOX_BATCHES: Final = 1000  # a full inbox stops the pumps; the sources then drop their oldest and count it
LATE_WAIT_S: Final = 0.05  # late readings gather this long before they are committed together


class AgentError(Exception):
    """The agent cannot start; the message says why in one line."""


async def run_until_stopped(site: SitePlan, data: Path) -> None:
    """Run until SIGINT or SIGTERM."""
    logging.basicConfig(
        level=logging.WARNING, stream=sys.stderr, format="%(asctime)s %(levelname)s %(name)s: %(message)s"
    )
    stop = asyncio.Event()
    loop = asyncio.get_running_loop()
    for number in (signal.SIGINT, signal.SIGTERM):
        # Windows has no add_signal_handler; there Ctrl-C raises KeyboardInterrupt through asyncio.run.
        with contextlib.suppress(NotImplementedError):
            loop.add_signal_handler(number, stop.set)
    await run(site, data, clock=SystemClock(), stop=stop)


async def run(site: SitePlan, data: Path, *, clock: Clock, stop: asyncio.Event) -> None:
    """Run one agent on one data folder until ``stop`` is set.

    Raises
    ------
    AgentError
        The folder is in use, or a store cannot be opened.
    """
    try:
        with contextlib.ExitStack() as stack:
            stack.enter_context(only_agent(data))
            gases = await asyncio.to_thread(_gases, site, data / CACHE_FOLDER)
            pipeline = _open_pipeline(site, data, gases, stack, now=clock.now())
            await _Work(site, pipeline, clock, stop).run()
    except (StoreError, FolderInUseError, OSError) as error:
        raise AgentError(str(error)) from error


def _gases(site: SitePlan, cache: Path) -> dict[str, GasSurface]:
    return {plan.id: load_or_build(plan.unit.composition, plan.unit.domain, cache) for plan in site.units}


def _open_pipeline(
    site: SitePlan, data: Path, gases: Mapping[str, GasSurface], stack: contextlib.ExitStack, *, now: float
) -> Pipeline:
    store = SeriesWriter(data / SERIES_FILE)
    journal = JournalWriter(data / JOURNAL_FILE)
    stack.callback(store.close)
    stack.callback(journal.close)
    store.open()
    journal.open()
    reader = SeriesReader(data / SERIES_FILE)
    journal_reader = JournalReader(data / JOURNAL_FILE)
    stack.callback(reader.close)
    stack.callback(journal_reader.close)
    configuration = store.configuration(site.digest, site.text, now)
    for plan in site.units:
        store.register(plan.id, input_columns(plan), result_columns(plan))
    pipeline = Pipeline(
        site, store=store, reader=reader, journal=journal, journal_reader=journal_reader,
        lines={p.id: UnitLine(p, gases[p.id], configuration=configuration) for p in site.units},
    )  # fmt: skip
    pipeline.start(now)
    return pipeline


class _Work:
    """The tasks of a running agent. The pipeline is only ever used by one of them at a time."""

    def __init__(self, site: SitePlan, pipeline: Pipeline, clock: Clock, stop: asyncio.Event) -> None:
        self._pipeline = pipeline
        self._clock = clock
        self._stop = stop
        self._inbox: asyncio.Queue[Sequence[Reading]] = asyncio.Queue(INBOX_BATCHES)
        inputs = [i for plan in site.units for i in plan.inputs]
        self._sources: dict[str, PlantSource] = {
            name: build_source(source, [i for i in inputs if i.source == name], clock)
            for name, source in site.sources.items()
        }

    async def run(self) -> None:
        async with asyncio.TaskGroup() as group:
            pumps = [
                group.create_task(self._pump(source), name=f"source {name}")
                for name, source in self._sources.items()
            ]
            ticks = group.create_task(self._keep_ticks(), name="ticks")
            await self._stop.wait()
            # The tick in hand is finished and acknowledged before the sources close.
            await ticks
            for pump in pumps:
                pump.cancel()

    async def _pump(self, source: PlantSource) -> None:
        async with source:
            async for batch in source:
                await self._inbox.put(batch)

    async def _keep_ticks(self) -> None:
        while not self._stop.is_set():
            await self._take_readings()
            now = self._clock.now()
            self._pipeline.watch_clock(now)
            if self._pipeline.late_waiting:
                self._acknowledge(await asyncio.to_thread(self._pipeline.commit_late))
            if now >= self._pipeline.next_due():
                statuses = [s.status() for s in self._sources.values()]
                self._acknowledge(await asyncio.to_thread(self._pipeline.tick, now, statuses))

    async def _take_readings(self) -> None:
        """Wait for readings until the next tick is due, then take all there are."""
        wait_s = min(1.0, max(0.0, self._pipeline.next_due() - self._clock.now()))
        batches: list[Sequence[Reading]] = []
        with contextlib.suppress(TimeoutError):
            batches.append(await asyncio.wait_for(self._inbox.get(), wait_s))
            await asyncio.sleep(min(LATE_WAIT_S, wait_s))
        while not self._inbox.empty():
            batches.append(self._inbox.get_nowait())
        if batches:
            self._pipeline.accept((r for batch in batches for r in batch), self._clock.now())

    def _acknowledge(self, receipts: Iterable[Receipt]) -> None:
        by_source: defaultdict[str, list[Receipt]] = defaultdict(list)
        for receipt in receipts:
            by_source[receipt.source].append(receipt)
        for name, mine in by_source.items():
            self._sources[name].acknowledge(mine)
