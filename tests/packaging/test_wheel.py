"""The wheel carries every tracked file of the four packages, and nothing else."""

import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
PACKAGES = ("agent", "model", "dashboard", "simulator")


def _tracked() -> set[str]:
    """Files git knows in the four packages; outside a checkout, the files that are there."""
    done = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard", *PACKAGES],
        cwd=ROOT, capture_output=True, text=True, check=False,
    )  # fmt: skip
    if done.returncode == 0:
        return {line for line in done.stdout.splitlines() if (ROOT / line).is_file()}
    paths = (p for name in PACKAGES for p in (ROOT / name).rglob("*") if p.is_file())
    return {p.relative_to(ROOT).as_posix() for p in paths if "__pycache__" not in p.parts}


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("wheel")
    # The build backend is a test dependency, so that no second environment has to be fetched.
    subprocess.run(
        [sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", str(out), str(ROOT)],
        check=True, capture_output=True, timeout=120,
    )  # fmt: skip
    (path,) = out.glob("throwline-*.whl")
    return path


def test_wheel_holds_exactly_the_tracked_files(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        held = {n for n in archive.namelist() if n.split("/")[0] in PACKAGES}
    assert held == _tracked()


def test_wheel_offers_the_command(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        (entry,) = (n for n in archive.namelist() if n.endswith("entry_points.txt"))
        assert "throwline = agent.cli:main" in archive.read(entry).decode()
