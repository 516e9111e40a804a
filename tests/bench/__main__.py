"""``python -m tests.bench NAME``: long measurements whose results are committed in tests/results/."""

import argparse
import importlib
from pathlib import Path

NAMES = sorted(p.stem for p in Path(__file__).parent.glob("*.py") if not p.stem.startswith("_"))

parser = argparse.ArgumentParser(prog="python -m tests.bench", description=__doc__)
parser.add_argument("name", choices=NAMES)
name, rest = parser.parse_known_args()
raise SystemExit(importlib.import_module(f"tests.bench.{name.name}").main(rest))
