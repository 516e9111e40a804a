"""The plant as a process: command line, caches, and what it says to who started it."""

import argparse
import asyncio
import json
import logging
import math
import sys
from collections.abc import Mapping, Sequence
from importlib.resources import files
from pathlib import Path

from agent.siteplan.errors import SiteFileError
from agent.siteplan.load import load_site
from simulator.code_cache import choose_code_cache
from simulator.scenario import ScenarioError, Story, load_scenario


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
    choose_code_cache()
    # The compiler is loaded with these, and looks for its folder then.
    from simulator.plant import Plant, PlantMismatchError  # noqa: PLC0415
    from simulator.serving import PlantError, serve_until_signalled  # noqa: PLC0415

    try:
        plan = load_site(site, addresses=dict(addresses or {}))
        told = load_scenario(scenario_path(scenario), plan)
        plant = Plant(plan, told, pace=pace, seed=seed)

        def began(at: float) -> None:
            _say("plant up")
            if timetable:
                _say(_timetable(plant.story, at, plan.time_zone))

        serving = serve_until_signalled(plant, plan, began=began, ledger=ledger, duration_s=duration_s)
        asyncio.run(serving)
    except (SiteFileError, ScenarioError, PlantMismatchError, PlantError, ValueError) as error:
        print(f"plant: {error}", file=sys.stderr)  # noqa: T201
        return 1
    return 0


def _timetable(story: Story, start: float, time_zone: str) -> str:
    return json.dumps(
        {
            "timetable": [(start + after, text) for after, text in story.timetable()],
            "time_zone": time_zone,
            "repeats_after_s": story.repeats_after_s,
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
    parser.add_argument(
        "--pace",
        type=float,
        default=1.0,
        help="hurry story, weather and metal by this factor; cranks turn at their true rate, so that bottles "
        "settle that much slower beside them",
    )
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
