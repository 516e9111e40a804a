"""Fewer points for a chart, without losing a peak or a gap."""

import numpy as np
from numpy.typing import NDArray

_KEPT_EACH = 3  # lowest, highest, first missing


def keep_extremes(ticks: NDArray[np.int64], values: NDArray[np.float64], max_points: int) -> NDArray[np.intp]:
    """Places of the rows to keep: per slice of time and series the lowest, the highest and the first missing.

    Parameters
    ----------
    ticks
        Unix seconds, ascending (m,).
    values
        NaN where there is none (m, n).
    max_points
        The most rows to keep; never fewer than three for each series are.

    Returns
    -------
    Ascending places (k,), k <= max(max_points, 3 n).
    """
    count, width = values.shape
    if count <= max_points or width == 0:
        return np.arange(count, dtype=np.intp)
    slices = max(1, max_points // (_KEPT_EACH * width))
    span = int(ticks[-1]) - int(ticks[0]) + 1
    slice_of = (ticks - ticks[0]) * slices // span
    starts = np.flatnonzero(np.diff(slice_of, prepend=-1))
    kept: set[int] = set()
    for first, last in zip(starts, [*starts[1:], count], strict=True):
        for series in range(width):
            part = values[first:last, series]
            missing = np.isnan(part)
            if missing.any():
                kept.add(int(first + np.argmax(missing)))
            if not missing.all():
                kept.add(int(first + np.nanargmin(part)))
                kept.add(int(first + np.nanargmax(part)))
    return np.array(sorted(kept), dtype=np.intp)
