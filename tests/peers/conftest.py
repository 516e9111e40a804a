"""Node.js programs that stand on the other end of the wire."""

import json
import queue
import shutil
import subprocess
import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).parent
DEADLINE_S = 60.0


class Peer:
    """One program: orders in, answers out, one JSON line each."""

    def __init__(self, script: str, *words: str) -> None:
        program = shutil.which("node")
        assert program is not None
        self._process = subprocess.Popen(
            [program, str(HERE / script), *words],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        self._lines: queue.SimpleQueue[str | None] = queue.SimpleQueue()
        self._said: list[str] = []
        self._threads = [
            threading.Thread(target=self._hear, daemon=True),
            threading.Thread(target=self._overhear, daemon=True),
        ]
        for thread in self._threads:
            thread.start()

    def answer(self) -> dict[str, Any]:
        try:
            line = self._lines.get(timeout=DEADLINE_S)
        except queue.Empty:
            line = None
        assert line is not None, "the peer says nothing more: " + "\n".join(self._said[-15:])
        found = json.loads(line)
        assert isinstance(found, dict)
        return found

    def tell(self, order: dict[str, Any]) -> None:
        assert self._process.stdin is not None
        self._process.stdin.write(json.dumps(order) + "\n")
        self._process.stdin.flush()

    def close(self) -> None:
        for stream in (self._process.stdin,):
            assert stream is not None
            stream.close()
        try:
            self._process.wait(10)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
        for thread in self._threads:
            thread.join(5)
        for out in (self._process.stdout, self._process.stderr):
            assert out is not None
            out.close()

    def _hear(self) -> None:
        assert self._process.stdout is not None
        for line in self._process.stdout:
            if line.startswith("{"):  # libraries may say something of their own
                self._lines.put(line)
            else:
                self._said.append(line.rstrip())
        self._lines.put(None)

    def _overhear(self) -> None:
        assert self._process.stderr is not None
        self._said.extend(line.rstrip() for line in self._process.stderr)


@pytest.fixture
def start_peer() -> Iterator[Any]:
    """Start a peer and wait until it is connected."""
    peers: list[Peer] = []

    def start(script: str, *words: str) -> Peer:
        peer = Peer(script, *words)
        peers.append(peer)
        assert peer.answer() == {"up": True}
        return peer

    yield start
    for peer in peers:
        peer.close()
