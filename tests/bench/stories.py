"""Every story that can be told live in some minutes, through the whole product, scored against its truth."""

import argparse
import tempfile
from collections.abc import Sequence
from pathlib import Path

from simulator.score import Verdict, table
from tests.bench._result import write_result
from tests.system.house import house
from tests.system.telling import TELLINGS, tell


def main(argv: Sequence[str]) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench stories")
    parser.add_argument("stories", nargs="*", default=list(TELLINGS))
    scores = []
    for story in parser.parse_args(argv).stories:
        with tempfile.TemporaryDirectory() as folder, house(Path(folder)) as built:
            scores.append(tell(built, TELLINGS[story])[0])
        print(table(scores[-1:]), flush=True)
    figures: dict[str, object] = {
        score.story: {
            "failed": score.failed,
            "found": len(score.of(Verdict.FOUND)),
            "table": table([score]).splitlines(),
        }
        for score in scores
    }
    write_result("stories", figures, seeds=[1])
    return int(any(score.failed for score in scores))
