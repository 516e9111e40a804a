"""Numbers, times and reasons in words; what is remembered to say them."""

from collections.abc import Sequence
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from agent.records import Frame, Quality
from agent.storage.series import SeriesRange
from dashboard.readings import LOOK_BACK_S, Blindness, Onset, Row
from dashboard.trend import DAY_MINUTES, DayLines
from dashboard.wording import band, clock, quality_words, series_words, subject_words, with_unit
from model.quantities import QUANTITIES

COPENHAGEN = ZoneInfo("Europe/Copenhagen")
NO_FRAME = Frame(
    unit="A",
    tick=0,
    values=np.empty(0, np.float32),
    quality=np.empty(0, np.uint8),
    ages=np.empty(0, np.float32),
)


class Stored:
    """Stored rows of one series: (tick, value, quality)."""

    def __init__(self, rows: Sequence[tuple[int, float, int]]) -> None:
        self.rows = rows
        self.asked: list[tuple[int, int]] = []

    def range(self, _unit: str, _names: Sequence[str], start: int, stop: int) -> SeriesRange:
        self.asked.append((start, stop))
        inside = [r for r in self.rows if start <= r[0] < stop]
        return (
            np.array([r[0] for r in inside], dtype=np.int64),
            np.array([[r[1]] for r in inside], dtype=np.float64).reshape(len(inside), 1),
            np.array([[r[2]] for r in inside], dtype=np.uint8).reshape(len(inside), 1),
        )


def row(tick: int, value: float, quality: int) -> Row:
    return Row(
        unit="A",
        tick=tick,
        configuration=1,
        values={"x": value},
        quality={"x": quality},
        frame=NO_FRAME,
        input_names=(),
    )


def test_since_when_is_found_in_stored_rows() -> None:
    blindness = Blindness("A")
    stored = Stored([(t, 1.0, 0) if t < 70 else (t, np.nan, 3) for t in range(50, 101)])
    blindness.update(row(100, np.nan, 3), stored)
    assert blindness.since("x") == Onset(tick=70, exact=True)  # hand: the first stale tick


def test_an_onset_before_the_search_is_not_claimed() -> None:
    blindness = Blindness("A")
    now = 10_000
    stored = Stored([(t, np.nan, 3) for t in range(now - 5000, now + 1)])
    blindness.update(row(now, np.nan, 3), stored)
    assert blindness.since("x") == Onset(tick=now - LOOK_BACK_S, exact=False)


def test_between_ticks_the_store_is_not_searched_again() -> None:
    blindness = Blindness("A")
    stored = Stored([(100, 1.0, 0)])
    blindness.update(row(100, 1.0, 0), stored)
    blindness.update(row(101, np.nan, 2), stored)
    blindness.update(row(102, np.nan, 6), stored)
    assert blindness.since("x") == Onset(tick=101, exact=True)
    assert stored.asked == []
    blindness.update(row(103, 1.0, 0), stored)
    assert blindness.since("x") is None


def test_after_a_gap_the_store_is_searched() -> None:
    blindness = Blindness("A")
    stored = Stored([(t, np.nan, 6) for t in range(150, 201)])
    blindness.update(row(100, 1.0, 0), stored)
    blindness.update(row(200, np.nan, 6), stored)
    assert blindness.since("x") == Onset(tick=150, exact=False)


def test_a_line_grows_its_span_and_keeps_the_lowest_of_each_step() -> None:
    lines = DayLines("A")
    start = 6_000_000  # a whole minute
    stored = Stored([(start + t, float(t), 0) for t in range(600)])
    line = lines.line("x", start + 599, stored)
    assert line is not None
    assert line.span == "15 min"
    # hand: ten minutes stored, the lowest value of each is its first; five minutes before them empty
    np.testing.assert_array_equal(line.values[-10:], np.arange(0, 600, 60))
    assert np.isnan(line.values[:5]).all()


def test_a_gap_in_the_rows_is_a_gap_in_the_line() -> None:
    lines = DayLines("A")
    start = 6_000_000
    stored = Stored([(start + t, 1.0, 0) for t in range(900) if not 300 <= t < 420])
    line = lines.line("x", start + 899, stored)
    assert line is not None
    assert np.flatnonzero(np.isnan(line.values)).tolist() == [5, 6]  # hand: minutes 5 and 6


def test_only_new_rows_are_read_again() -> None:
    lines = DayLines("A")
    start = 6_000_000
    stored = Stored([(start + t, 1.0, 0) for t in range(900)])
    lines.line("x", start + 600, stored)
    lines.line("x", start + 605, stored)
    lines.line("x", start + 630, stored)
    assert len(stored.asked) == 2
    assert stored.asked[0][0] == start + 600 - (DAY_MINUTES - 1) * 60
    assert stored.asked[1] == (start + 600, start + 631)


def test_one_minute_is_no_line_yet() -> None:
    assert DayLines("A").line("x", 6_000_030, Stored([(6_000_000 + t, 1.0, 0) for t in range(31)])) is None


@pytest.mark.parametrize(
    ("key", "u", "expected"),
    [
        (
            "discharge_temperature",
            0.58,
            "± 1.2",
        ),  # hand: two standard uncertainties, a difference has no offset
        ("suction_pressure", 10_000.0, "± 0.20"),  # hand: 2 x 0.1 bar, the barometer does not count
        ("reversal_degrees", np.radians(1.0), "± 2"),
        ("pin_load_tension", float("nan"), ""),
    ],
)
def test_a_band_is_two_standard_uncertainties(key: str, u: float, expected: str) -> None:
    assert band(QUANTITIES[key], u, barometer_pa=101_300.0) == expected


def test_a_small_band_is_not_said_to_be_nought() -> None:
    assert band(QUANTITIES["reversal_degrees"], np.radians(0.2), barometer_pa=1e5) == "± 0.4"


def test_a_degree_sign_stands_close() -> None:
    assert with_unit("40", QUANTITIES["reversal_degrees"]) == "40°"
    assert with_unit("40.0", QUANTITIES["pin_load_tension"]) == "40.0 kN"


def test_time_is_site_time_and_names_another_day() -> None:
    noon = 1_790_000_000  # 2026-09-21 14:13:20 UTC. # hand
    assert clock(noon, COPENHAGEN, now=noon + 60) == "16:13:20"  # summer time, two hours ahead
    assert clock(noon - 86_400, COPENHAGEN, now=noon) == "20 Sep 16:13:20"


def test_words_of_places() -> None:
    assert subject_words("cylinder12") == "cylinder 12"
    assert subject_words("unit") == "unit"
    assert series_words("stage2.discharge_pressure") == "discharge pressure, stage 2"
    assert series_words("unit.flow") == "measured flow"


def test_a_code_of_a_newer_store_is_said() -> None:
    assert quality_words(int(Quality.STALE)) == "stale"
    assert quality_words(77) == "reason 77, not known to these pages"
