"""Memory and processor use of the whole demo ten minutes after its start (Linux: PSS of the process tree)."""

import argparse
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from pathlib import Path

import psutil

from tests.bench._result import write_result


def _tree(pid: int) -> list[psutil.Process]:
    root = psutil.Process(pid)
    return [root, *root.children(recursive=True)]


def _pss_mb(processes: Sequence[psutil.Process]) -> dict[str, float]:
    """PSS of each process, by the last words of its command line."""
    return {f"{_label(p)} ({p.pid})": p.memory_full_info().pss / 1e6 for p in processes}


def _label(process: psutil.Process) -> str:
    """What the process is: the words behind the leash that its parent holds, else the demo itself."""
    words = process.cmdline()
    if "simulator.leash" not in words:
        return "demo"
    place = words.index("simulator.leash") + 1
    return words[place + 1] if words[place] == "agent" else words[place]


def _cpu_seconds(processes: Sequence[psutil.Process]) -> float:
    return sum(sum(p.cpu_times()[:2]) for p in processes)


def main(argv: Sequence[str]) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench footprint")
    parser.add_argument("--minutes", type=float, default=10.0)
    minutes = parser.parse_args(argv).minutes
    with tempfile.TemporaryDirectory() as folder:
        demo = subprocess.Popen(
            [sys.executable, "-P", "-m", "agent", "demo"],
            cwd=folder,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        try:
            time.sleep(minutes * 60 - 60)
            processes = _tree(demo.pid)
            before, started = _cpu_seconds(processes), time.monotonic()
            time.sleep(60)
            cores = (_cpu_seconds(processes) - before) / (time.monotonic() - started)
            pss = _pss_mb(processes)
        finally:
            demo.send_signal(signal.SIGINT)
            asked = time.monotonic()
            demo.wait(30)
            ended = time.monotonic() - asked
    path = write_result(
        "footprint",
        {
            "minutes": minutes,
            "pss_mb": {k: round(v) for k, v in pss.items()},
            "pss_mb_sum": round(sum(pss.values())),
            "cores_last_minute": round(cores, 2),
            "seconds_to_end": round(ended, 1),
        },
        seeds=[1],
    )
    print(Path(path).read_text(encoding="utf-8"))
    return 0 if sum(pss.values()) <= 900 and cores < 1 else 1
