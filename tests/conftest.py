"""What every test may lean on."""

import os
import shutil
from pathlib import Path

import pytest

import model

ROOT = Path(__file__).resolve().parents[1]


def pytest_configure(config: pytest.Config) -> None:
    """Say which copy of the code is tested; a wrong one must not pass unseen."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    here = Path(model.__file__).resolve().parent
    installed = os.environ.get("THROWLINE_TEST_INSTALLED") == "1"
    if not installed and here != ROOT / "model":
        raise pytest.UsageError(f"tests read {here}, not this checkout")


def _missing(marker: str) -> str | None:
    if marker == "mosquitto" and shutil.which("mosquitto", path=_wide_path()) is None:
        return "Mosquitto is not on this machine"
    if marker == "browser" and shutil.which("chromium", path=_wide_path()) is None:
        return "Chromium is not on this machine"
    if marker == "peers" and shutil.which("node") is None:
        return "Node.js is not on this machine"
    if marker == "peers" and not (ROOT / "tests" / "peers" / "node_modules").is_dir():
        return "the peers are not installed: npm ci --prefix tests/peers"
    return None


def _wide_path() -> str:
    # Debian installs the broker in /usr/sbin, which is not on every user's PATH.
    return os.pathsep.join([os.environ.get("PATH", ""), "/usr/sbin", "/usr/local/sbin"])


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Skip with the reason what this machine cannot run; where skipping is forbidden, say so and stop."""
    forbidden = os.environ.get("THROWLINE_FORBID_SKIP") == "1"
    run_slow = forbidden or "slow" in config.getoption("-m", default="")
    for item in items:
        for marker in ("mosquitto", "browser", "peers"):
            reason = _missing(marker) if item.get_closest_marker(marker) else None
            if reason and forbidden:
                raise pytest.UsageError(f"{item.nodeid}: {reason}, and skipping is forbidden here")
            if reason:
                item.add_marker(pytest.mark.skip(reason=reason))
        if item.get_closest_marker("slow") and not run_slow:
            item.add_marker(pytest.mark.skip(reason="minutes long; .ci/run and `pytest -m slow` run it"))
