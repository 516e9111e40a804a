import dataclasses
import math
from collections.abc import Callable, Iterable

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from agent.manipulation.frames import FrameBuilder
from agent.manipulation.late import WINDOW_S, late_change
from agent.records import Frame, Quality, Reading
from agent.siteplan.plan import UnitPlan

BOTH = frozenset({"bus", "dcs"})
Read = Callable[..., Reading]


class Shelf:
    """Stored frames in memory."""

    def __init__(self, frames: Iterable[Frame] = ()) -> None:
        self.frames = {f.tick: f for f in frames}

    def frame(self, unit: str, tick: int) -> Frame | None:
        found = self.frames.get(tick)
        return found if found is not None and found.unit == unit else None

    def take(self, plan: UnitPlan, readings: Iterable[Reading], last_tick: int) -> tuple[Frame, ...]:
        change = late_change(plan, readings, self, last_tick)
        self.frames.update((f.tick, f) for f in change.frames)
        return change.frames


def live(plan: UnitPlan, readings: Iterable[Reading], ticks: Iterable[int]) -> Shelf:
    builder = FrameBuilder(plan)
    builder.accept(readings, None)
    return Shelf(builder.frame(tick, BOTH) for tick in ticks)


def quality(frame: Frame, place: int) -> Quality:
    return Quality(int(frame.quality[place]))


def test_a_late_reading_goes_into_every_tick_it_would_have_been_the_last_of(
    plan: UnitPlan, read: Read
) -> None:
    shelf = live(plan, [read(0, 99.0, 10.0), read(0, 102.5, 12.0)], range(99, 106))
    changed = shelf.take(plan, [read(0, 100.2, 11.0)], 105)
    assert [f.tick for f in changed] == [101, 102]
    for frame in changed:
        assert float(frame.values[0]) == pytest.approx(11e5 + 101300, rel=1e-7)  # hand
        assert float(frame.ages[0]) == pytest.approx(frame.tick - 100.2, abs=1e-4)


def test_a_repeat_changes_nothing(plan: UnitPlan, read: Read) -> None:
    shelf = live(plan, [read(0, 99.0, 10.0)], range(99, 106))
    assert shelf.take(plan, [read(0, 100.2, 11.0)], 105)
    assert shelf.take(plan, [read(0, 100.2, 11.0)], 105) == ()
    assert shelf.take(plan, [read(0, 99.0, 10.0)], 105) == ()


def test_ticks_never_made_are_made_with_the_other_inputs_empty(plan: UnitPlan, read: Read) -> None:
    shelf = Shelf()
    frames = shelf.take(plan, [read(0, 100.0, 10.0)], 200)
    assert [f.tick for f in frames] == list(range(100, 111))  # the stale limit is 10 s
    for frame in frames:
        assert quality(frame, 0) is Quality.GOOD
        assert {quality(frame, place) for place in range(1, 7)} == {Quality.NEVER}
        assert np.isnan(frame.values[1:]).all()
        assert np.isnan(frame.ages[1:]).all()
    shelf.take(plan, [read(1, 100.0, 30.0)], 200)
    assert quality(shelf.frames[105], 0) is Quality.GOOD
    assert quality(shelf.frames[105], 1) is Quality.GOOD


def test_no_frame_is_made_after_the_last_tick(plan: UnitPlan, read: Read) -> None:
    assert [f.tick for f in Shelf().take(plan, [read(0, 99.5, 10.0)], 101)] == [100, 101]


def test_a_late_bad_reading_takes_the_number_away(plan: UnitPlan, read: Read) -> None:
    shelf = live(plan, [read(0, 99.0, 10.0)], range(99, 102))
    shelf.take(plan, [read(0, 100.0, None, quality=Quality.BAD)], 101)
    assert quality(shelf.frames[99], 0) is Quality.GOOD
    assert quality(shelf.frames[100], 0) is Quality.BAD
    assert math.isnan(float(shelf.frames[100].values[0]))


def test_readings_older_than_the_window_are_refused_and_counted(plan: UnitPlan, read: Read) -> None:
    old, just = read(0, 5000.0 - WINDOW_S - 0.1, 10.0), read(1, 5000.0 - WINDOW_S, 10.0)
    change = late_change(plan, [old, just], Shelf(), 5000)
    assert change.refused == 1
    assert change.frames[0].tick == 5000 - WINDOW_S


def test_an_old_word_sent_on_change_is_not_refused_and_fills_what_is_stored(
    plan: UnitPlan, read: Read
) -> None:
    shelf = live(plan, [], [4900, 4990, 5000])
    change = late_change(plan, [read(5, 100.0, word="50")], shelf, 5000)
    assert change.refused == 0
    assert [f.tick for f in change.frames] == [4900, 4990, 5000]
    assert all(float(f.values[5]) == 1.0 for f in change.frames)


def test_a_repeated_word_of_a_month_ago_changes_nothing(plan: UnitPlan, read: Read) -> None:
    """The stored age is a float32: at a month it is good to a quarter of a second."""
    word = read(5, 1_000_000.37, word="50")
    shelf = live(plan, [word], range(3_600_000, 3_600_050))
    assert shelf.take(plan, [word], 3_600_049) == ()


def test_a_tick_made_late_takes_the_word_over_from_the_tick_before_it(plan: UnitPlan, read: Read) -> None:
    shelf = live(plan, [read(5, 50.0, word="50")], range(95, 100))
    shelf.take(plan, [read(0, 300.0, 10.0)], 400)
    assert float(shelf.frames[305].values[5]) == 1.0
    assert float(shelf.frames[305].ages[5]) == pytest.approx(255.0)


def test_stored_frames_are_not_changed_in_place(plan: UnitPlan, read: Read) -> None:
    shelf = live(plan, [read(0, 99.0, 10.0)], [100])
    before = shelf.frames[100]
    kept = before.values.copy()
    late_change(plan, [read(0, 99.5, 11.0)], shelf, 100)
    assert before.values.tobytes() == kept.tobytes()


START, END = 1000, 1040  # what the live path made; before START the agent slept


@st.composite
def deliveries(draw: st.DrawFn) -> list[tuple[int, float, bool]]:
    """(input, source time, on time) in no order; times of one input are at least 5 ms apart."""
    stamp = st.integers(min_value=-40 * 200, max_value=40 * 200).map(lambda n: START + n / 200)
    keys = draw(st.lists(st.tuples(st.sampled_from([0, 1, 5]), stamp), unique=True, min_size=1, max_size=40))
    return [(place, time, time > START and draw(st.booleans())) for place, time in keys]


def _reading(read: Read, place: int, time: float) -> Reading:
    if place == 5:
        return read(5, time, word="100" if int(time * 200) % 2 else "50")
    return read(place, time, 10.0 + (time - START) / 10)


def _alike(a: Frame, b: Frame) -> bool:
    return (
        a.values.tobytes() == b.values.tobytes()
        and a.quality.tobytes() == b.quality.tobytes()
        and np.allclose(a.ages, b.ages, rtol=0, atol=1e-3, equal_nan=True)
    )


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(delivery=deliveries(), data=st.data())
def test_any_order_and_grouping_stores_the_same_frames(
    plan: UnitPlan, read: Read, delivery: list[tuple[int, float, bool]], data: st.DataObject
) -> None:
    readings = [(_reading(read, place, time), on_time) for place, time, on_time in delivery]
    on_time = [r for r, in_time in readings if in_time]
    late = [r for r, in_time in readings if not in_time]
    in_order = live(plan, on_time, range(START + 1, END + 1))
    for reading in sorted(late, key=lambda r: r.source_time):
        in_order.take(plan, [reading], END)

    mixed = live(plan, on_time, range(START + 1, END + 1))
    rest = data.draw(st.permutations(late))
    while rest:
        size = data.draw(st.integers(min_value=1, max_value=len(rest)))
        group, rest = rest[:size], rest[size:]
        mixed.take(plan, [*group, group[0]], END)

    assert in_order.frames.keys() == mixed.frames.keys()
    assert all(_alike(in_order.frames[t], mixed.frames[t]) for t in in_order.frames)

    # And what is stored is what the live path would have made, had every reading come in time.
    ideal = live(plan, [r for r, _ in readings], range(START - 45, END + 1))
    for tick, frame in ideal.frames.items():
        usable = frame.quality <= Quality.UNCERTAIN
        if tick not in mixed.frames:
            assert not usable[:5].any()
            continue
        stored = mixed.frames[tick]
        assert (usable == (stored.quality <= Quality.UNCERTAIN)).all()
        assert stored.values.tobytes() == frame.values.tobytes()
        assert np.allclose(stored.ages[usable], frame.ages[usable], rtol=0, atol=1e-3)


def test_frames_are_whole_records(plan: UnitPlan, read: Read) -> None:
    frame = Shelf().take(plan, [read(0, 100.0, 10.0)], 100)[0]
    assert {f.name for f in dataclasses.fields(frame)} == {"unit", "tick", "values", "quality", "ages"}
    assert (frame.values.dtype, frame.quality.dtype, frame.ages.dtype) == (np.float32, np.uint8, np.float32)
