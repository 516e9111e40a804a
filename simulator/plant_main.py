"""The plant as a process: machines, instruments and all wires in one asyncio program."""

import argparse
import asyncio
import json
import logging
import math
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import AsyncExitStack
from dataclasses import dataclass, field
from importlib.resources import files
from pathlib import Path

from agent.siteplan.errors import SiteFileError
from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan, Source, SourceKind
from simulator.plant import Plant, PlantMismatchError
from simulator.sample import Sample
from simulator.scenario import Scenario, ScenarioError, load_scenario
from simulator.serve_mqtt import MqttWire
from simulator.serve_opcua import OpcuaWire
from simulator.serve_sparkplug import SparkplugWire
from simulator.steady_table import MACHINES
from simulator.stopping import stop_on_signals

PERIOD_S = 1.0
# Samples are taken between the whole seconds at which the agent looks, so that delivery is no race.
PHASE_S = 0.4


class PlantError(Exception):
    """The plant cannot start; the message says why in one sentence."""


@dataclass(kw_only=True)
class _Wires:
    mqtt: dict[str, MqttWire | SparkplugWire] = field(default_factory=dict)
    opcua: dict[str, OpcuaWire] = field(default_factory=dict)

    @property
    def up(self) -> bool:
        return all(wire.up for wire in self.mqtt.values())

    async def put(self, samples: Sequence[Sample]) -> None:
        for name, mqtt in self.mqtt.items():
            mqtt.publish([s for s in samples if s.tag.source == name])
        for name, opcua in self.opcua.items():
            await opcua.write([s for s in samples if s.tag.source == name])

    async def open(self, site: SitePlan, ledger: Path | None, stack: AsyncExitStack) -> None:
        for source in site.sources.values():
            tags = [i for u in site.units for i in u.inputs if i.source == source.name]
            if source.kind is SourceKind.MQTT_JSON:
                self._join(source, MqttWire(source.address, tags=len(tags), ledger=ledger), stack)
            elif source.kind is SourceKind.MQTT_SPARKPLUG:
                self._join(source, SparkplugWire(source.address, group=source.group, tags=tags), stack)
            else:
                wire = OpcuaWire(source.address, site.units, source.name)
                try:
                    self.opcua[source.name] = await stack.enter_async_context(wire)
                except OSError as error:
                    raise PlantError(f"cannot serve {source.address}: {error.strerror or error}") from None

    def _join(self, source: Source, wire: MqttWire | SparkplugWire, stack: AsyncExitStack) -> None:
        wire.open()
        stack.push_async_callback(asyncio.to_thread, wire.close)
        self.mqtt[source.name] = wire


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
        wires = _Wires()
        await wires.open(site, ledger, stack)
        story_start: float | None = None
        begun = time.monotonic()
        while not stop.is_set() and time.monotonic() - begun < duration_s:
            due = math.floor(time.time() - PHASE_S) + PERIOD_S + PHASE_S
            if await _stopped_before(stop, due):
                return
            if story_start is None and wires.up:
                story_start = due
                began(due)
            await wires.put(plant.sample(due, story_start))


async def _stopped_before(stop: asyncio.Event, due: float) -> bool:
    try:
        async with asyncio.timeout(max(0.0, due - time.time())):
            return await stop.wait()
    except TimeoutError:
        return False


def scenario_path(name_or_path: str) -> Path:
    """A scenario by the name of a shipped one, or by its path."""
    shipped = files("simulator") / "scenarios" / f"{name_or_path}.yaml"
    return Path(str(shipped)) if shipped.is_file() else Path(name_or_path)


def run(
    site: Path,
    *,
    scenario: str = "first-light",
    addresses: Mapping[str, str] | None = None,
    pace: float = 1.0,
    seed: int = 1,
    ledger: Path | None = None,
    duration_s: float = math.inf,
    timetable: bool = False,
) -> int:
    """Run the plant until SIGINT or SIGTERM; 0 if it ended as asked, 1 if it could not start.

    It says ``plant up`` once all wires are up; with ``timetable`` also a line of JSON: what happens when.
    """
    logging.basicConfig(level=logging.WARNING, format="plant: %(message)s")
    logging.getLogger("asyncua").setLevel(logging.CRITICAL)  # a client that hangs up is no news here
    try:
        plan = load_site(site, addresses=dict(addresses or {}))
        story = load_scenario(scenario_path(scenario), MACHINES)
        plant = Plant(plan, story, MACHINES, pace=pace, seed=seed)

        def began(at: float) -> None:
            _say("plant up")
            if timetable:
                _say(_timetable(story, at, pace, plan.time_zone))

        asyncio.run(_until_signalled(plant, plan, began=began, ledger=ledger, duration_s=duration_s))
    except (SiteFileError, ScenarioError, PlantMismatchError, PlantError, ValueError) as error:
        print(f"plant: {error}", file=sys.stderr)  # noqa: T201
        return 1
    return 0


async def _until_signalled(
    plant: Plant, plan: SitePlan, *, began: Callable[[float], None], ledger: Path | None, duration_s: float
) -> None:
    stop = stop_on_signals()
    await serve(plant, plan, stop=stop, began=began, ledger=ledger, duration_s=duration_s)


def _timetable(story: Scenario, start: float, pace: float, time_zone: str) -> str:
    return json.dumps(
        {
            "timetable": [(start + after, text) for after, text in story.real_timetable(pace)],
            "time_zone": time_zone,
            "repeats_after_s": None if story.repeat is None else story.repeat.real_s(pace),
        }
    )


def _say(line: str) -> None:
    print(line, flush=True)  # noqa: T201 - the line its parent waits for


def _address(text: str) -> tuple[str, str]:
    name, equals, url = text.partition("=")
    if not (name and equals and url):
        raise argparse.ArgumentTypeError(f"{text!r} is not SOURCE=URL")
    return name, url


def main(argv: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(prog="python -m simulator.plant_main", description=__doc__)
    parser.add_argument("--site", type=Path, required=True)
    parser.add_argument("--scenario", default="first-light", help="name of a shipped scenario, or a file")
    parser.add_argument("--address", type=_address, action="append", default=[], metavar="SOURCE=URL")
    parser.add_argument("--pace", type=float, default=1.0, help="hurry the story by this factor")
    parser.add_argument("--seed", type=int, default=1, help="of the noise")
    parser.add_argument(
        "--ledger", type=Path, help="append each message that the broker confirmed, a JSON line each"
    )
    parser.add_argument("--duration", type=float, default=math.inf, help="end after so many seconds")
    parser.add_argument("--timetable", action="store_true", help="say what happens when, as a line of JSON")
    words = parser.parse_args(argv)
    return run(
        words.site,
        scenario=words.scenario,
        addresses=dict(words.address),
        pace=words.pace,
        seed=words.seed,
        ledger=words.ledger,
        duration_s=words.duration,
        timetable=words.timetable,
    )


if __name__ == "__main__":
    sys.exit(main())
