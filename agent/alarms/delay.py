"""A delay that counts judged ticks, so that a pause of the agent or of the data fulfils nothing."""

from collections import deque


class Delay:
    """Holds once the condition was seen at every judged tick over a time of ``length_s``.

    Only judged ticks count, a second each. A pause longer than the delay starts it anew. Nothing older than
    twice the delay matters, so replaying `memory_s` of stored ticks after a restart gives the same count.
    """

    def __init__(self, length_s: float) -> None:
        if not length_s >= 0:
            raise ValueError(f"a delay of {length_s} s")
        self._length_s = length_s
        self._seen: deque[int] = deque()

    @property
    def memory_s(self) -> int:
        return int(2 * max(self._length_s, 1.0)) + 1

    def reset(self) -> None:
        self._seen.clear()

    def update(self, tick: int, *, seen: bool) -> bool:
        """Take one judged tick; True once the delay is over."""
        if not seen:
            self._seen.clear()
            return False
        if self._seen and tick - self._seen[-1] > max(self._length_s, 1.0):
            self._seen.clear()
        self._seen.append(tick)
        while tick - self._seen[0] >= self.memory_s:
            self._seen.popleft()
        return len(self._seen) - 1 >= self._length_s

    def running(self, tick: int) -> bool:
        """Whether it has begun and a tick now could go on with it."""
        return bool(self._seen) and tick - self._seen[-1] <= max(self._length_s, 1.0)
