"""A browser, the pages as their own process, and a store that lives in real time."""

import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from tests.dashboard.written_store import BAR, SITE_FILE, Lost, WrittenStore

sync_api = pytest.importorskip("playwright.sync_api", reason="the Python package playwright is not installed")

FLAGS = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
SERVE = """
import sys
from pathlib import Path
from dashboard.serve import run
run(Path(sys.argv[1]), Path(sys.argv[2]), port=0)
"""
ROOT = Path(__file__).resolve().parents[2]
THIN = {"K-110": {"stage1.suction_pressure": 24.0 * BAR}}  # little is left before the gas-load limit


@dataclass(kw_only=True)
class Served:
    """The pages of one store."""

    address: str
    data: Path
    process: subprocess.Popen[str]


@dataclass(kw_only=True)
class Plant:
    """Writes a tick each second until it is told to stop; stands in for the agent."""

    store: WrittenStore
    lost: Lost = field(default_factory=dict)
    answers: bool = True
    stopped: threading.Event = field(default_factory=threading.Event)
    thread: threading.Thread | None = None
    fault: BaseException | None = None

    def start(self) -> None:
        now = int(time.time())
        self.store.ticks(now - 600, 601, changes=THIN)
        self.thread = threading.Thread(target=self._run, args=(now,), name="plant")
        self.thread.start()

    def stop(self) -> None:
        self.stopped.set()
        if self.thread is not None:
            self.thread.join(timeout=10)
        if self.fault is not None:
            raise self.fault

    def _run(self, last: int) -> None:
        try:
            while not self.stopped.wait(0.05):
                now = int(time.time())
                if now > last:
                    last = now
                    self.store.ticks(now, changes=THIN, lost=self.lost)
                    if self.answers:
                        self.store.answer(now)
        except BaseException as error:  # noqa: BLE001 - shown by `stop`, in the test's own thread
            self.fault = error


@pytest.fixture(scope="session")
def gas_cache(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("gas")


@pytest.fixture
def store(tmp_path: Path, gas_cache: Path) -> Iterator[WrittenStore]:
    with WrittenStore(data=tmp_path / "data", gas_cache=gas_cache) as opened:
        yield opened


@pytest.fixture
def plant(store: WrittenStore) -> Iterator[Plant]:
    running = Plant(store=store)
    running.start()
    yield running
    running.stop()


@pytest.fixture
def served(tmp_path: Path) -> Iterator[Served]:
    """The pages, on a free port, over ``tmp_path / "data"``, which need not exist."""
    data = tmp_path / "data"
    process = subprocess.Popen(
        [sys.executable, "-c", SERVE, str(SITE_FILE), str(data)],
        cwd=ROOT, stderr=subprocess.PIPE, text=True, env=os.environ | {"OPENBLAS_NUM_THREADS": "1"},
    )  # fmt: skip
    assert process.stderr is not None
    line = process.stderr.readline()
    assert "http://" in line, line + process.stderr.read()
    yield Served(address=line[line.index("http://") :].strip().rstrip("/"), data=data, process=process)
    process.send_signal(signal.SIGTERM)
    said = process.communicate(timeout=10)[1]
    assert process.returncode == 0
    assert said == "", said  # nothing to complain of


@pytest.fixture(scope="module")  # it holds this thread's event loop as long as it lives
def chromium(tmp_path_factory: pytest.TempPathFactory) -> Iterator["sync_api.BrowserType"]:
    with sync_api.sync_playwright() as playwright:
        yield playwright.chromium


@dataclass(kw_only=True)
class Watch:
    """What a page did that it must not do."""

    address: str
    console: list[str] = field(default_factory=list)
    outside: list[str] = field(default_factory=list)
    policy: list[str] = field(default_factory=list)

    def assert_clean(self) -> None:
        assert self.console == []
        assert self.policy == []
        assert self.outside == []


@dataclass(kw_only=True)
class Screen:
    page: "sync_api.Page"
    watch: Watch


@pytest.fixture
def open_page(chromium: "sync_api.BrowserType", served: Served, tmp_path: Path) -> Iterator["Opener"]:
    opener = Opener(chromium, served, tmp_path)
    yield opener
    opener.close()


class Opener:
    """Opens pages, each with a user data folder of its own."""

    def __init__(self, chromium: "sync_api.BrowserType", served: Served, folder: Path) -> None:
        self._chromium, self._served, self._folder = chromium, served, folder
        self._contexts: list[sync_api.BrowserContext] = []

    def __call__(self, path: str, *, width: int = 1366, height: int = 768, dark: bool = False) -> Screen:
        path_of = shutil.which("chromium")
        assert path_of is not None
        context = self._chromium.launch_persistent_context(
            self._folder / f"profile{len(self._contexts)}",
            executable_path=path_of,
            args=list(FLAGS),
            viewport={"width": width, "height": height},
            color_scheme="dark" if dark else "light",
        )
        self._contexts.append(context)
        page = context.pages[0]
        watch = Watch(address=self._served.address)
        page.expose_function("tellPolicy", lambda text: watch.policy.append(text))  # noqa: PLW0108 - no builtins
        page.add_init_script(
            "document.addEventListener('securitypolicyviolation',"
            " (e) => window.tellPolicy(`${e.violatedDirective} ${e.blockedURI} ${e.sourceFile}`))"
        )
        page.on("console", lambda m: watch.console.append(m.text) if m.type in {"error", "warning"} else None)
        page.on("pageerror", lambda e: watch.console.append(str(e)))
        page.on("request", lambda r: None if _inside(r.url, watch.address) else watch.outside.append(r.url))
        page.goto(self._served.address + path)
        return Screen(page=page, watch=watch)

    def close(self) -> None:
        for context in self._contexts:
            context.close()


def _inside(url: str, address: str) -> bool:
    return url.startswith((address + "/", "data:", "blob:"))
