"""One way to write down a measurement: what, when, on which commit, with which seeds."""

import json
import os
import platform
import subprocess
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
RESULTS = ROOT / "tests" / "results"


def write_result(name: str, figures: Mapping[str, object], *, seeds: list[int]) -> Path:
    """Write tests/results/<name>.json."""
    commit = subprocess.run(
        ["git", "rev-parse", "--short", "HEAD"], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout.strip()
    RESULTS.mkdir(exist_ok=True)
    path = RESULTS / f"{name}.json"
    record = {
        "bench": name,
        "date": datetime.now(UTC).strftime("%Y-%m-%d"),
        "commit": commit,
        "seeds": seeds,
        "python": platform.python_version(),
        "cores": os.cpu_count(),
        **figures,
    }
    path.write_text(json.dumps(record, indent=1) + "\n", encoding="utf-8")
    return path
