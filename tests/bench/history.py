"""A long history from a cold start on one core: time, memory, rows and sizes.

Tables are made anew; with ``--cold`` the machine code is compiled anew as well. Times are those of one child
process: of the processor, and of the wall, which counts only on a machine that does nothing else.
"""

import argparse
import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from pathlib import Path

import pyarrow.parquet as pq

from tests.bench._result import write_result


def main(argv: Sequence[str]) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench history")
    parser.add_argument("--days", type=float, default=400.0)
    parser.add_argument("--seed", type=int, default=1000)
    parser.add_argument("--cold", action="store_true", help="compile anew as well")
    words = parser.parse_args(argv)
    with tempfile.TemporaryDirectory() as folder:
        out = Path(folder) / "out"
        environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}
        if words.cold:
            environment["NUMBA_CACHE_DIR"] = str(Path(folder) / "code")
        order = ["plant", "history", "--days", str(words.days), "--seed", str(words.seed)]
        before, begun = resource.getrusage(resource.RUSAGE_CHILDREN), time.monotonic()
        subprocess.run(
            [sys.executable, "-P", "-m", "agent", *order, "--out", str(out), "--cache", f"{folder}/cache"],
            env=environment, stdout=subprocess.DEVNULL, check=True,
        )  # fmt: skip
        wall, after = time.monotonic() - begun, resource.getrusage(resource.RUSAGE_CHILDREN)
        cpu = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
        files = sorted(p for p in out.rglob("*") if p.is_file())
        rows = {p.stem: pq.read_metadata(p).num_rows for p in sorted(out.glob("*.parquet"))}
        held_out = json.loads((out / "truth" / "history.json").read_text())["held_out_error_over_allowed"]
        figures = {
            "days": words.days,
            "machine code": "compiled anew" if words.cold else "kept",
            "cpu_s": round(cpu),
            "wall_s": round(wall),
            "peak_rss_mb": round(after.ru_maxrss / 1e3),
            "rows": rows,
            "mb": {str(p.relative_to(out)): round(p.stat().st_size / 1e6, 1) for p in files},
            "held_out_error_over_allowed": held_out,
        }
    path = write_result(f"history-{'cold' if words.cold else 'warm'}", figures, seeds=[words.seed])
    print(path.read_text(encoding="utf-8"))
    return 0 if cpu < 600 else 1
