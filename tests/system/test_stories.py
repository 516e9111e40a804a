"""Short stories told live through the whole product, and scored against their sealed truth.

The others, which take longer, are told by the bench `stories`.
"""

from pathlib import Path

import pytest

from simulator.score import Verdict, table
from simulator.truth import truth_of
from tests.system.house import house
from tests.system.telling import TELLINGS, tell

pytestmark = [pytest.mark.slow, pytest.mark.mosquitto, pytest.mark.timeout(600)]


@pytest.mark.parametrize("story", ["sinking-suction", "wrong-ends"])
def test_story_is_told_and_heard(story: str, tmp_path: Path) -> None:
    with house(tmp_path) as built:
        found, shown = tell(built, TELLINGS[story])
    print("\n" + table([found]))
    assert not found.failed, table([found])
    asked = [x for x in truth_of(story).expected_first if x.needs is None]
    assert len(found.of(Verdict.FOUND)) >= len(asked)
    assert bool(shown) == bool(asked), "pages and journal differ"
