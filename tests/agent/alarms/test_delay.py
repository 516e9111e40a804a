import pytest
from hypothesis import given
from hypothesis import strategies as st

from agent.alarms.delay import Delay


def ticks_until_over(delay: Delay, ticks: list[int]) -> int | None:
    return next((t for t in ticks if delay.update(t, seen=True)), None)


def test_sixty_seconds_are_sixty_seconds() -> None:
    assert ticks_until_over(Delay(60), list(range(100, 300))) == 160
    assert ticks_until_over(Delay(0), [100, 101]) == 100
    assert ticks_until_over(Delay(0.5), [100, 101]) == 101


def test_one_tick_without_it_starts_anew() -> None:
    delay = Delay(5)
    for tick in range(5):
        assert not delay.update(tick, seen=True)
    assert not delay.update(5, seen=False)
    assert ticks_until_over(delay, list(range(6, 20))) == 11


def test_a_pause_of_the_agent_fulfils_nothing() -> None:
    delay = Delay(60)
    assert not delay.update(0, seen=True)
    assert not delay.update(59, seen=True)  # 59 s later, but seen twice only
    assert ticks_until_over(delay, list(range(60, 200))) == 118  # hand: 59 more judged ticks


def test_a_longer_pause_starts_anew() -> None:
    delay = Delay(10)
    for tick in range(10):
        delay.update(tick, seen=True)
    assert not delay.update(1000, seen=True)
    assert ticks_until_over(delay, list(range(1001, 1100))) == 1010


def test_running_says_whether_the_next_tick_could_go_on() -> None:
    delay = Delay(10)
    assert not delay.running(0)
    delay.update(0, seen=True)
    assert delay.running(10)
    assert not delay.running(11)
    delay.update(5, seen=False)
    assert not delay.running(6)
    delay.update(6, seen=True)
    delay.reset()
    assert not delay.running(7)


def test_a_negative_delay_is_refused() -> None:
    for length in (-1.0, float("nan")):
        with pytest.raises(ValueError, match="a delay of"):
            Delay(length)


@given(
    steps=st.lists(st.tuples(st.integers(1, 6), st.booleans()), min_size=1, max_size=120),
    length=st.sampled_from([0, 1, 2, 5, 7.5]),
    cut=st.integers(0, 120),
)
def test_replaying_what_it_remembers_gives_the_same(
    steps: list[tuple[int, bool]], length: float, cut: int
) -> None:
    ticks, tick = [], 0
    for step, seen in steps:
        tick += step
        ticks.append((tick, seen))
    whole = Delay(length)
    verdicts = [whole.update(t, seen=s) for t, s in ticks]
    cut = min(cut, len(ticks))
    late = Delay(length)
    now = ticks[cut - 1][0] if cut else 0
    for t, s in ticks[:cut]:
        if t > now - late.memory_s:
            late.update(t, seen=s)
    assert [late.update(t, seen=s) for t, s in ticks[cut:]] == verdicts[cut:]


@given(steps=st.lists(st.tuples(st.integers(1, 6), st.booleans()), min_size=1, max_size=120))
def test_it_is_over_only_after_enough_judged_ticks_without_a_contrary_one(
    steps: list[tuple[int, bool]],
) -> None:
    delay, tick, run, history = Delay(4), 0, 0, []
    for step, seen in steps:
        tick += step
        run = run + 1 if seen else 0
        history.append(tick)
        if delay.update(tick, seen=seen):
            assert run >= 5  # hand: a first tick and four seconds counted after it
            assert history[-1] - history[-5] <= 2 * 4
