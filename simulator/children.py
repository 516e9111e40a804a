"""Child processes of the demo: started on a leash, watched, and ended together."""

import contextlib
import os
import subprocess
import sys
import threading
import time
from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Self

LAST_LINES = 15
ENDING_S = 3.5  # then what still runs is killed


@dataclass(frozen=True, slots=True, kw_only=True)
class Death:
    """A child that ended unasked."""

    name: str
    code: int
    last_lines: tuple[str, ...]


class Child:
    """One process and the last lines it said."""

    def __init__(self, name: str, words: Sequence[str], environment: Mapping[str, str]) -> None:
        self.name = name
        # Own session: a Ctrl-C in the terminal reaches the parent alone, and each child is asked once.
        new_group = getattr(subprocess, "CREATE_NEW_PROCESS_GROUP", 0)  # Windows has no sessions
        self._process = subprocess.Popen(  # noqa: S603 - our own modules
            [sys.executable, "-P", "-m", "simulator.leash", *words],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            env={**os.environ, **environment},
            start_new_session=True,
            creationflags=new_group,
        )
        self._lines: deque[str] = deque(maxlen=LAST_LINES)
        self._reader = threading.Thread(target=self._read, name=f"output of {name}", daemon=True)
        self._reader.start()

    @property
    def pid(self) -> int:
        return self._process.pid

    def death(self) -> Death | None:
        code = self._process.poll()
        if code is None:
            return None
        self._reader.join(1.0)
        return Death(name=self.name, code=code, last_lines=tuple(self._lines))

    def line_with(self, start: str) -> str | None:
        """The newest of its last lines that begins so."""
        return next((line for line in reversed(tuple(self._lines)) if line.startswith(start)), None)

    def let_go(self) -> None:
        with contextlib.suppress(OSError):
            if self._process.stdin is not None:
                self._process.stdin.close()

    def wait(self, seconds: float) -> None:
        try:
            self._process.wait(max(0.0, seconds))
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
        self._reader.join(1.0)
        if self._process.stdout is not None:
            self._process.stdout.close()

    def _read(self) -> None:
        if self._process.stdout is None:
            return
        for line in self._process.stdout:
            self._lines.append(line.decode("utf-8", "replace").rstrip())


class Children:
    """All children of one parent; leaving the block ends them, in the order they were started last."""

    def __init__(self, environment: Mapping[str, str]) -> None:
        self._environment = environment
        self._children: list[Child] = []

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        end = time.monotonic() + ENDING_S
        for child in reversed(self._children):
            child.let_go()
        for child in reversed(self._children):
            child.wait(end - time.monotonic())

    def start(self, name: str, words: Sequence[str]) -> Child:
        child = Child(name, words, self._environment)
        self._children.append(child)
        return child

    def death(self) -> Death | None:
        """The first child found dead."""
        return next((d for d in (c.death() for c in self._children) if d is not None), None)
