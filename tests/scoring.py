"""Score the journal of a run: ``python -m tests.scoring DATA STORY --began 2026-12-01T14:40:05Z --pace 3``.

DATA is the agent's data folder. Exit code 1 if the story failed.
"""

import argparse
import sys
from collections.abc import Collection, Sequence
from datetime import datetime
from pathlib import Path

from agent.journal.sqlite import JournalReader
from agent.siteplan.load import load_site
from simulator.plant_main import scenario_path
from simulator.scenario import load_scenario
from simulator.score import Run, Score, score, table
from simulator.truth import Need, truth_of

SILENCE_S = 60.0  # alarms wait as long: less says nothing of a story that names no length
SITE = Path(__file__).resolve().parents[1] / "simulator" / "sites" / "ostmere.yaml"


def score_journal(
    data: Path, story: str, *, began_s: float, pace: float = 1.0, in_reach: Collection[Need] = ()
) -> tuple[Score, Run]:
    """The score of what an agent's journal holds, up to where all units are judged.

    What is not judged yet has not been said yet, and an agent that stopped looking has seen nothing.
    """
    journal = JournalReader(data / "journal.db")
    try:
        judged = [journal.last_tick(unit.id) or 0 for unit in load_site(SITE).units]
        events = journal.events()
    finally:
        journal.close()
    told = load_scenario(scenario_path(story), load_site(SITE)).at_pace(pace)
    least_s = SILENCE_S if told.length_s is None else told.length_s
    run = Run(began_s=began_s, ended_s=float(min(judged)), pace=pace, least_s=least_s)
    return score(truth_of(story), events, run, in_reach=in_reach), run


def main(argv: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.scoring", description=__doc__)
    parser.add_argument("data", type=Path, help="the agent's data folder")
    parser.add_argument("story")
    parser.add_argument("--began", required=True, help="when the story began, ISO 8601 with its zone")
    parser.add_argument("--pace", type=float, default=1.0)
    parser.add_argument("--in-reach", type=Need, action="append", default=[], choices=list(Need))
    words = parser.parse_args(argv)
    began = datetime.fromisoformat(words.began)
    if began.tzinfo is None:
        parser.error("--began: names no zone; end it with Z for UTC")
    found, _ = score_journal(
        words.data, words.story, began_s=began.timestamp(), pace=words.pace, in_reach=words.in_reach
    )
    print(table([found]))
    return 1 if found.failed else 0


if __name__ == "__main__":
    sys.exit(main())
