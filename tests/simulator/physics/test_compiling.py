"""The compiler stays out of the way: loaded late, cached where it is told, never beside the sources."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import simulator

PACKAGE = Path(simulator.__file__).parent


def python(code: str, folder: Path, **environment: str) -> str:
    done = subprocess.run(
        [sys.executable, "-P", "-B", "-c", code],
        env={**os.environ, "PYTHONPATH": str(folder), **environment},
        capture_output=True,
        text=True,
        timeout=200,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_values_load_without_the_compiler() -> None:
    code = (
        "import sys, simulator, simulator.faults, simulator.equipment, simulator.ostmere, simulator.outcome\n"
    )
    code += "assert 'numba' not in sys.modules\n"
    python(code, PACKAGE.parent)


def test_the_machine_loads_none_of_the_expected_value_code() -> None:
    code = "import sys, simulator.machine\n"
    code += "names = {'gas', 'kinematics', 'cycle', 'rodload', 'stage', 'train', 'evaluate', 'uncertainty'}\n"
    code += "assert not names & {n.removeprefix('model.') for n in sys.modules if n.startswith('model.')}\n"
    code += "assert 'CoolProp' not in sys.modules\n"
    python(code, PACKAGE.parent)


@pytest.mark.slow
def test_machine_code_goes_to_the_folder_named_and_is_used_again(tmp_path: Path) -> None:
    for name in ("simulator", "model", "agent"):
        source = PACKAGE.parent / name
        shutil.copytree(source, tmp_path / "site" / name, ignore=shutil.ignore_patterns("__pycache__"))
    site, cache = tmp_path / "site", tmp_path / "cache"
    before = sorted(site.rglob("*"))
    code = (
        "import time\nbegan = time.process_time()\n"
        "import simulator\nfrom simulator.machine import Machine\n"
        "from simulator.ostmere import EQUIPMENT, USUAL\n"
        "from agent.siteplan.load import load_site\nfrom pathlib import Path\n"
        "site = Path(simulator.__file__).parent / 'sites' / 'ostmere.yaml'\n"
        "unit = load_site(site).unit('K-330').unit\n"
        "loaded = time.process_time()\n"
        "Machine(unit, EQUIPMENT['K-330'], USUAL['K-330'], 1).run(1)\n"
        "print(loaded - began, time.process_time() - loaded)\n"
    )
    _, first = map(float, python(code, site, NUMBA_CACHE_DIR=str(cache)).split())
    imports, second = map(float, python(code, site, NUMBA_CACHE_DIR=str(cache)).split())
    assert sorted(site.rglob("*")) == before  # nothing written beside the sources
    assert list(cache.rglob("*.nbc"))
    assert second < 0.5 * first
    print(
        f"processor time: imports {imports:.1f} s, first turn compiled {first:.1f} s, cached {second:.2f} s"
    )
    assert second <= 2.0  # S2
    python(code, site, NUMBA_CACHE_DIR="")  # no folder: compiles in memory
    assert sorted(site.rglob("*")) == before
