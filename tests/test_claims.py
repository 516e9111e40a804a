"""Every claim names a test that exists, or a bench whose result is committed."""

import subprocess
import sys
import tomllib
from datetime import date
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
CLAIMS = tomllib.loads((ROOT / "tests" / "claims.toml").read_text(encoding="utf-8"))["claim"]


@pytest.fixture(scope="module")
def collected() -> frozenset[str]:
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "--collect-only", "-q", "-p", "no:cacheprovider", "tests"],
        cwd=ROOT, capture_output=True, text=True, timeout=120, check=True,
    )  # fmt: skip
    ids = {line.split("[")[0].strip() for line in done.stdout.splitlines() if "::" in line}
    return frozenset(ids)


@pytest.mark.parametrize("claim", CLAIMS, ids=lambda c: c["name"])
def test_claim_is_complete_and_names_what_shows_it(
    claim: dict[str, object], collected: frozenset[str]
) -> None:
    assert claim["sentence"]
    assert claim["figure"]
    assert isinstance(claim["date"], date)
    tests = claim.get("tests", [])
    bench = claim.get("bench", "")
    assert tests or bench
    for name in tests:
        assert name in collected, f"{claim['name']} names {name}, which pytest does not collect"
    if bench:
        assert (ROOT / "tests" / "bench" / f"{bench}.py").is_file()
        assert list((ROOT / "tests" / "results").glob(f"{bench}*")), f"no committed result of bench {bench}"


def test_claim_names_are_unique() -> None:
    names = [claim["name"] for claim in CLAIMS]
    assert len(names) == len(set(names))
