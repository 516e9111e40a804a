import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from agent.manipulation.frames import HISTORY_S, FrameBuilder
from agent.manipulation.verdict import verdict
from agent.records import Frame, Quality, Reading
from agent.siteplan.plan import UnitPlan

BUS, DCS = "bus", "dcs"
BOTH = frozenset({BUS, DCS})
Read = Callable[..., Reading]

# hand: 20 barg = 20e5 + 101300 Pa in the plan's own conversion
TWENTY_BARG_PA = 2101300.0


def value(frame: Frame, place: int) -> float:
    return float(frame.values[place])


def quality(frame: Frame, place: int) -> Quality:
    return Quality(int(frame.quality[place]))


def age(frame: Frame, place: int) -> float:
    return float(frame.ages[place])


def test_the_last_reading_at_or_before_the_tick_counts_and_newer_ones_do_not(
    plan: UnitPlan, read: Read
) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 99.2, 18.0), read(0, 100.0, 20.0), read(0, 100.001, 30.0)], None)
    frame = builder.frame(100, BOTH)
    assert value(frame, 0) == TWENTY_BARG_PA
    assert age(frame, 0) == 0.0


def test_a_frame_for_a_second_already_past_comes_out_as_it_would_have_then(
    plan: UnitPlan, read: Read
) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 100.0 + n, 10.0 + n / 10) for n in range(HISTORY_S)], None)
    frame = builder.frame(103, BOTH)
    assert value(frame, 0) == pytest.approx(10.3e5 + 101300, rel=1e-7)  # hand; float32 rounding


def test_values_are_what_the_store_will_keep(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 100.0, 1 / 3)], None)
    frame = builder.frame(100, BOTH)
    assert frame.values.dtype == np.float32
    assert verdict(plan, plan.inputs[0], read(0, 100.0, 1 / 3))[0] == value(frame, 0)


def test_age_at_the_stale_limit_is_still_good_and_just_beyond_it_is_stale(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 90.0, 20.0), read(1, 89.9, 40.0)], None)
    frame = builder.frame(100, BOTH)
    assert quality(frame, 0) is Quality.GOOD
    assert quality(frame, 1) is Quality.STALE
    assert math.isnan(value(frame, 1))
    assert age(frame, 1) == pytest.approx(10.1)


def test_nothing_received_is_never_or_source_lost(plan: UnitPlan) -> None:
    frame = FrameBuilder(plan).frame(100, {DCS})
    assert quality(frame, 0) is Quality.SOURCE_LOST
    assert quality(frame, 5) is Quality.NEVER
    assert np.isnan(frame.values).all()
    assert np.isnan(frame.ages).all()


def test_a_lost_source_is_named_once_its_readings_are_stale(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 95.0, 20.0)], None)
    assert quality(builder.frame(100, {DCS}), 0) is Quality.GOOD
    assert quality(builder.frame(106, {DCS}), 0) is Quality.SOURCE_LOST


def test_an_input_sent_on_change_holds_for_days_while_its_source_is_up(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(5, 100.0, word="50")], None)
    frame = builder.frame(100 + 3 * 86400, BOTH)
    assert (value(frame, 5), quality(frame, 5)) == (1.0, Quality.GOOD)
    lost = builder.frame(101 + 3 * 86400, {BUS})
    assert quality(lost, 5) is Quality.SOURCE_LOST
    assert math.isnan(value(lost, 5))


def test_the_word_before_the_newest_is_kept_however_old(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(5, 100.0, word="50"), read(5, 100.0 + 3 * HISTORY_S, word="100")], None)
    frame = builder.frame(100 + 3 * HISTORY_S - 2, BOTH)
    assert (value(frame, 5), quality(frame, 5)) == (1.0, Quality.GOOD)


@pytest.mark.parametrize(
    ("place", "reading", "expected"),
    [
        (5, {"word": "75"}, Quality.UNKNOWN_WORD),
        (5, {"value": 1.0}, Quality.BAD),
        (6, {"value": 2.0}, Quality.BAD),
        (0, {"value": None}, Quality.BAD),
        (0, {"value": 20.0, "quality": Quality.BAD}, Quality.BAD),
        (0, {"value": math.nan}, Quality.BAD),
        (0, {"value": math.inf}, Quality.BAD),
        (0, {"value": 1e300}, Quality.BAD),
        (0, {"value": 40.81}, Quality.OUT_OF_SPAN),  # hand: 2 % of 40 bar is 0.8 bar
        (0, {"value": -0.81}, Quality.OUT_OF_SPAN),
    ],
)
def test_what_cannot_be_believed_is_no_number(
    plan: UnitPlan, read: Read, place: int, reading: dict[str, object], expected: Quality
) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(place, 100.0, **reading)], None)
    frame = builder.frame(100, BOTH)
    assert quality(frame, place) is expected
    assert math.isnan(value(frame, place))


def test_a_little_outside_the_span_is_kept_unclamped(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 100.0, 40.79)], None)
    assert value(builder.frame(100, BOTH), 0) == pytest.approx(40.79e5 + 101300, rel=1e-7)  # hand


def test_uncertain_is_kept_with_its_value(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept([read(0, 100.0, 20.0, quality=Quality.UNCERTAIN)], None)
    frame = builder.frame(100, BOTH)
    assert (value(frame, 0), quality(frame, 0)) == (TWENTY_BARG_PA, Quality.UNCERTAIN)


def test_late_readings_are_handed_back_and_still_count_for_frames_to_come(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    on_time, late = read(0, 100.5, 21.0), read(1, 100.0, 40.0)
    assert builder.accept([on_time, late], 100) == (late,)
    assert quality(builder.frame(101, BOTH), 1) is Quality.GOOD


def test_readings_of_another_unit_are_passed_over(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    stranger = Reading(
        source=BUS,
        address="site/elsewhere",
        source_time=50.0,
        received_time=50.0,
        value=1.0,
        word=None,
        quality=Quality.GOOD,
    )
    assert builder.accept([stranger], 100) == ()


def test_memory_is_bounded_at_any_rate(plan: UnitPlan, read: Read) -> None:
    builder = FrameBuilder(plan)
    builder.accept((read(0, 100.0 + n / 50, 20.0) for n in range(50_000)), None)
    assert len(builder._tracks[0]._ticks) <= HISTORY_S + 2


times = st.integers(min_value=0, max_value=60_000).map(lambda ms: 1000 + ms / 1000)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(stamps=st.lists(times, unique=True, min_size=1, max_size=60), data=st.data())
def test_order_of_arrival_does_not_matter(
    plan: UnitPlan, read: Read, stamps: list[float], data: st.DataObject
) -> None:
    readings = [read(0, stamp, (stamp - 1000) / 2) for stamp in stamps]
    shuffled = data.draw(st.permutations(readings))
    first, second = FrameBuilder(plan), FrameBuilder(plan)
    first.accept(sorted(readings, key=lambda r: r.source_time), None)
    for reading in shuffled:
        second.accept([reading, reading], None)  # a repeat changes nothing
    for tick in range(1000, 1075):
        a, b = first.frame(tick, BOTH), second.frame(tick, BOTH)
        seen = [s for s in stamps if s <= tick]
        assert a.values.tobytes() == b.values.tobytes()
        assert a.quality.tobytes() == b.quality.tobytes()
        if seen and tick - max(seen) <= 10:
            expected = np.float32((max(seen) - 1000) / 2 * 1e5 + 101300)
            assert a.values[0] == expected
        else:
            assert np.isnan(a.values[0])
