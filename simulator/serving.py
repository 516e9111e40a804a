"""The plant on its wires: one asyncio program that samples, delays, cuts and sends.

The crank turns in a worker thread, a second ahead of its sending, so that no wire waits for it.
"""

import asyncio
import math
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import AsyncExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final

from agent.siteplan.plan import SitePlan, Source, SourceKind
from simulator.delivery import Delivery
from simulator.instrument_faults import LinkState
from simulator.plant import Plant
from simulator.sample import Sample
from simulator.serve_mqtt import MqttWire
from simulator.serve_opcua import OpcuaWire
from simulator.serve_sparkplug import SparkplugWire
from simulator.stopping import stop_on_signals

PERIOD_S: Final = 1.0
# Samples are taken between the whole seconds at which the agent looks, so that delivery is no race.
PHASE_S: Final = 0.4

Wire = MqttWire | SparkplugWire | OpcuaWire


class PlantError(Exception):
    """The plant cannot start; the message says why in one sentence."""


@dataclass(kw_only=True)
class Line:
    """One source: its wire, what delays it, whether it is cut."""

    wire: Wire
    delivery: Delivery
    is_cut: bool = False

    @property
    def up(self) -> bool:
        return isinstance(self.wire, OpcuaWire) or self.wire.up

    async def put(self, now: float, samples: Sequence[Sample], link: LinkState) -> None:
        if link.lost != self.is_cut:
            await self._switch(cut=link.lost)
        sent = self.delivery.update(now, samples, link)
        if isinstance(self.wire, OpcuaWire):
            await self.wire.write(sent)
        else:
            self.wire.publish(sent)

    async def _switch(self, *, cut: bool) -> None:
        self.is_cut = cut
        if isinstance(self.wire, OpcuaWire):
            await (self.wire.cut() if cut else self.wire.restore())
        else:
            await asyncio.to_thread(self.wire.cut if cut else self.wire.restore)


@dataclass(kw_only=True)
class Wires:
    """The lines of a site, by source."""

    lines: dict[str, Line] = field(default_factory=dict)

    @property
    def up(self) -> bool:
        return all(line.up for line in self.lines.values())

    async def put(self, now: float, samples: Sequence[Sample], links: Mapping[str, LinkState]) -> None:
        for name, line in self.lines.items():
            await line.put(now, [s for s in samples if s.tag.source == name], links[name])

    async def open(self, site: SitePlan, ledger: Path | None, stack: AsyncExitStack) -> None:
        for source in site.sources.values():
            wire = await _open(source, site, ledger, stack)
            self.lines[source.name] = Line(wire=wire, delivery=Delivery(f"delivery/{source.name}"))


async def _open(source: Source, site: SitePlan, ledger: Path | None, stack: AsyncExitStack) -> Wire:
    tags = [i for u in site.units for i in u.inputs if i.source == source.name]
    if source.kind is SourceKind.OPCUA:
        try:
            return await stack.enter_async_context(OpcuaWire(source.address, site.units, source.name))
        except OSError as error:
            raise PlantError(f"cannot serve {source.address}: {error.strerror or error}") from None
    wire = (
        MqttWire(source.address, tags=len(tags), ledger=ledger)
        if source.kind is SourceKind.MQTT_JSON
        else SparkplugWire(source.address, group=source.group, tags=tags)
    )
    wire.open()
    stack.push_async_callback(asyncio.to_thread, wire.close)
    return wire


async def serve(
    plant: Plant,
    site: SitePlan,
    *,
    stop: asyncio.Event,
    began: Callable[[float], None],
    ledger: Path | None = None,
    duration_s: float = math.inf,
) -> None:
    """Sample and serve until stopped or until the duration is over; ``began`` hears when the story begins."""
    async with AsyncExitStack() as stack:
        wires = Wires()
        await wires.open(site, ledger, stack)
        await asyncio.to_thread(plant.begin, time.time())  # while the wires come up
        story_start: float | None = None
        begun = time.monotonic()
        due = _next_due(time.time())
        while not stop.is_set() and time.monotonic() - begun < duration_s:
            if story_start is None and wires.up:
                story_start = due
                began(due)
            samples = await _sampled(plant, stop, due, story_start)
            if samples is None or await _stopped_before(stop, due):
                return
            elapsed = -1.0 if story_start is None else due - story_start
            await wires.put(due, samples, {name: plant.story.link(name, elapsed) for name in site.sources})
            # A second that could not be kept is left out; the machines make up for its turns.
            due = max(due + PERIOD_S, _next_due(time.time()))


async def _sampled(
    plant: Plant, stop: asyncio.Event, due: float, story_start: float | None
) -> Sequence[Sample] | None:
    """None if asked to stop meanwhile: the cranks then halt at the next unit, and nobody waits for them."""
    sampling = asyncio.create_task(asyncio.to_thread(plant.sample, due, story_start))
    stopping = asyncio.create_task(stop.wait())
    await asyncio.wait({sampling, stopping}, return_when=asyncio.FIRST_COMPLETED)
    if stopping.done():
        plant.halt()
        await sampling
        return None
    stopping.cancel()
    return await sampling


def _next_due(now: float) -> float:
    return math.floor(now - PHASE_S) + PERIOD_S + PHASE_S


async def _stopped_before(stop: asyncio.Event, due: float) -> bool:
    try:
        async with asyncio.timeout(max(0.0, due - time.time())):
            return await stop.wait()
    except TimeoutError:
        return False


async def serve_until_signalled(
    plant: Plant, site: SitePlan, *, began: Callable[[float], None], ledger: Path | None, duration_s: float
) -> None:
    """`serve`, ended by SIGINT or SIGTERM."""
    stop = stop_on_signals()
    await serve(plant, site, stop=stop, began=began, ledger=ledger, duration_s=duration_s)
