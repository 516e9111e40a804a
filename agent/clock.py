"""The only place that asks the time."""

import time
from typing import Protocol


class Clock(Protocol):
    def now(self) -> float:
        """Unix seconds, UTC; may be set back or forth by the operating system."""
        ...

    def monotonic(self) -> float:
        """Seconds that never run backwards; for waits and deadlines only."""
        ...


class SystemClock:
    def now(self) -> float:
        return time.time()

    def monotonic(self) -> float:
        return time.monotonic()


class HandClock:
    """A clock that moves only when told to, for tests and replay."""

    def __init__(self, now: float = 0.0) -> None:
        self._now = now
        self._monotonic = 0.0

    def now(self) -> float:
        return self._now

    def monotonic(self) -> float:
        return self._monotonic

    def advance(self, seconds: float) -> None:
        if seconds < 0:
            raise ValueError("time that passes is not negative; use step() for a clock that is set")
        self._now += seconds
        self._monotonic += seconds

    def step(self, seconds: float) -> None:
        """Set the clock by ``seconds``, back or forth, while no time passes."""
        self._now += seconds
