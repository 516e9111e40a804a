"""``throwline plant history``: names the cache folders before the compiler is loaded, then makes it."""

import sys
from collections.abc import Sequence
from datetime import UTC, datetime
from importlib.resources import files
from pathlib import Path

from simulator.code_cache import choose_code_cache


def run(
    out: Path,
    *,
    site: Path | None,
    days: float,
    scenario: str | None,
    seed: int,
    units: Sequence[str],
    start: str,
    cache: Path | None,
) -> int:
    """Make a history; 0 if it was written, 1 if not."""
    try:
        first = datetime.fromisoformat(start).replace(tzinfo=UTC)
    except ValueError:
        print(f"throwline plant history: {start!r} is not a date such as 2025-01-01", file=sys.stderr)  # noqa: T201
        return 1
    choose_code_cache()
    from simulator import history  # noqa: PLC0415 - it loads the compiler

    return history.run(
        site or Path(str(files("simulator") / "sites" / "ostmere.yaml")),
        out,
        days=days,
        scenario=scenario,
        seed=seed,
        units=units,
        start=first,
        cache=cache,
    )
