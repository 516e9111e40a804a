"""The README is true where a test can tell."""

import json
import re
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
PNG = b"\x89PNG\r\n\x1a\n"


def test_readme_shows_two_pictures_that_exist() -> None:
    pictures = re.findall(r"!\[[^\]]+\]\(([^)]+)\)", README)
    assert len(pictures) >= 2
    for name in pictures:
        data = (ROOT / name).read_bytes()
        assert data.startswith(PNG)
        assert len(data) <= 200_000


def test_readme_says_what_it_is_not() -> None:
    assert "Advisory only" in README
    assert "not a protective or safety function" in README


def test_figures_are_those_of_the_committed_results() -> None:
    footprint = json.loads((ROOT / "tests" / "results" / "footprint.json").read_text(encoding="utf-8"))
    assert f"{footprint['pss_mb_sum']} MB" in README
    assert f"{footprint['cores_last_minute']} of a core" in README
