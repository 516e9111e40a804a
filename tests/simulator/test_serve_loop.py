"""The loop that serves the plant: cranks turn beside the wires, lost links are cut, lots are delivered."""

import asyncio
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise
from typing import Any, cast

import pytest

from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan
from simulator.delivery import Delivery
from simulator.instrument_faults import LinkState
from simulator.plant import Plant
from simulator.plant_main import scenario_path
from simulator.sample import Sample
from simulator.scenario import load_scenario
from simulator.serve_mqtt import MqttWire
from simulator.serving import Line, serve
from tests.simulator.wires import free_port

SITE = scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml"


def control_system() -> SitePlan:
    """A site with one wire that needs no broker."""
    address = f"opc.tcp://127.0.0.1:{free_port()}/ostmere"
    site = load_site(SITE, addresses={"control-system": address})
    sources = {"control-system": site.sources["control-system"]}
    return replace(site, sources=sources, units=(site.unit("K-220"),))


class HeavyPlant:
    """Takes most of a second for each sample, as a machine would on a slow computer."""

    def __init__(self, site: SitePlan) -> None:
        self.story = load_scenario(scenario_path("quiet"), load_site(SITE)).at_pace(1.0)
        self.tags = site.units[0].inputs
        self.threads: set[int] = set()
        self.busy = False
        self.times: list[float] = []
        self.starts: set[float | None] = set()

    def begin(self, at: float) -> None:
        self.threads.add(threading.get_ident())
        self.times.append(at)

    def sample(self, at: float, story_start: float | None) -> Sequence[Sample]:
        self.threads.add(threading.get_ident())
        self.times.append(at)
        self.starts.add(story_start)
        self.busy = True
        time.sleep(0.6)
        self.busy = False
        return [Sample(tag=t, time=at, value=1.0) for t in self.tags if t.quantity == "speed"]


def test_cranks_turn_beside_the_loop_that_serves_the_wires() -> None:
    site = control_system()
    plant = HeavyPlant(site)
    ticks_while_busy = 0

    async def told() -> None:
        nonlocal ticks_while_busy
        stop = asyncio.Event()
        began: list[float] = []
        serving = asyncio.create_task(
            serve(cast("Plant", plant), site, stop=stop, began=began.append, duration_s=2.5)
        )
        while not serving.done():
            await asyncio.sleep(0.01)
            ticks_while_busy += plant.busy
        await serving
        assert began == plant.times[1:2]
        assert plant.starts == set(began)

    asyncio.run(told())
    assert threading.get_ident() not in plant.threads
    assert ticks_while_busy > 10  # none if a sample held the loop
    settled, *sampled = plant.times
    assert 0.0 < sampled[0] - settled < 2.0
    assert all(b - a >= 0.999 for a, b in pairwise(sampled))
    assert {round(t % 1.0, 6) for t in sampled} == {0.4}


@dataclass
class NotedWire:
    """Notes what is asked of it."""

    up: bool = True
    noted: list[Any] = field(default_factory=list)

    def publish(self, samples: Sequence[Sample]) -> None:
        self.noted.append([(s.value, s.historical) for s in samples])

    def cut(self) -> None:
        self.noted.append("cut")

    def restore(self) -> None:
        self.noted.append("restored")


@pytest.mark.parametrize("buffered", [True, False])
def test_lost_link_is_cut_once_and_restored_before_anything_is_sent(buffered: bool) -> None:
    tag = load_site(SITE).unit("K-110").inputs[0]
    wire = NotedWire()
    line = Line(wire=cast("MqttWire", wire), delivery=Delivery("d"))

    async def told() -> None:
        for second in range(5):
            link = LinkState(lost=second in {1, 2}, buffered=buffered)
            await line.put(second, [Sample(tag=tag, time=second, value=float(second))], link)

    asyncio.run(told())
    past = [(1.0, True), (2.0, True)] if buffered else []
    assert wire.noted == [
        [(0.0, False)], "cut", [], [], "restored", [*past, (3.0, False)], [(4.0, False)],
    ]  # fmt: skip
