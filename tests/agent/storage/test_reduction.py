import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from agent.storage.reduction import keep_extremes


def test_few_rows_are_all_kept() -> None:
    ticks = np.arange(10)
    assert keep_extremes(ticks, np.zeros((10, 2)), 10).tolist() == list(range(10))


def test_a_single_spike_and_a_single_gap_in_a_day_are_kept() -> None:
    ticks = np.arange(86_400)
    values = np.sin(ticks / 3000)[:, None]
    values[51_234] = 9.0
    values[7_777] = np.nan
    kept = keep_extremes(ticks, values, 900)
    assert len(kept) <= 900
    assert {51_234, 7_777} <= set(kept.tolist())


@settings(deadline=None)
@given(
    steps=st.lists(st.integers(1, 50), min_size=1, max_size=200),
    width=st.integers(1, 3),
    limit=st.integers(1, 60),
    seed=st.integers(0, 9999),
)
def test_extremes_and_gaps_of_every_series_stay_and_the_number_holds(
    steps: list[int], width: int, limit: int, seed: int
) -> None:
    rng = np.random.default_rng(seed)
    ticks = np.cumsum(steps)
    values = rng.normal(size=(len(ticks), width))
    values[rng.random(values.shape) < 0.1] = np.nan
    kept = keep_extremes(ticks, values, limit)
    assert np.all(np.diff(kept) > 0)
    assert len(kept) <= max(limit, 3 * width)
    for series in range(width):
        column = values[:, series]
        assert np.isnan(column).any() == np.isnan(column[kept]).any()
        if not np.isnan(column).all():
            assert np.nanmin(column[kept]) == np.nanmin(column)
            assert np.nanmax(column[kept]) == np.nanmax(column)
