"""Short stories told live through the whole product; the quick ones in the tests, all of them in a bench."""

import json
import time
from dataclasses import dataclass

from agent.siteplan.load import load_site
from simulator.plant_main import scenario_path
from simulator.scenario import load_scenario
from simulator.score import Score
from tests.scoring import score_journal
from tests.system.house import DEMO_SITE, House, Process, wait_for


@dataclass(frozen=True, slots=True, kw_only=True)
class Telling:
    """How a story is told here; alarms wait their full minute at any pace."""

    story: str
    pace: float
    lasts_s: float  # on the clock


TELLINGS = {
    t.story: t
    for t in (
        Telling(story="sinking-suction", pace=3.0, lasts_s=205.0),
        Telling(story="wrong-ends", pace=3.0, lasts_s=110.0),
        Telling(story="dry-cooler", pace=15.0, lasts_s=140.0),
        Telling(story="night-break", pace=60.0, lasts_s=240.0),
        Telling(story="power-dip", pace=10.0, lasts_s=185.0),
        Telling(story="quiet", pace=10.0, lasts_s=120.0),
    )
}


def _began(plant: Process, telling: Telling) -> float:
    """When the story began, by what the plant says of its timetable."""
    line = wait_for(
        "timetable", lambda: [x for x in plant.text().splitlines() if x.startswith("{") and x.endswith("}")]
    )[0]
    first = float(json.loads(line)["timetable"][0][0])
    told = load_scenario(scenario_path(telling.story), load_site(DEMO_SITE)).at_pace(telling.pace)
    return first - told.timetable()[0][0]


def tell(built: House, telling: Telling) -> tuple[Score, int]:
    """The story's score, and how many alarms the pages show at its end."""
    built.mosquitto()
    built.agent()
    wait_for("journal", (built.data / "journal.db").exists, 60)
    plant = built.plant("--scenario", telling.story, "--pace", f"{telling.pace:g}", "--timetable")
    built.pages()
    began = _began(plant, telling)
    time.sleep(max(0.0, began + telling.lasts_s - time.time()))
    assert all(p.running for p in built.processes), [p.text() for p in built.processes if not p.running]
    shown = len(built.get("/api/live")["alarms"])
    found, run = score_journal(built.data, telling.story, began_s=began, pace=telling.pace)
    assert run.ended_s > began + telling.lasts_s - 10.0, "the agent fell behind"
    return found, shown
