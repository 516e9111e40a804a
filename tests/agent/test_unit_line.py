"""One unit's line: the same numbers live, late and in any batch."""

from collections.abc import Sequence
from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest

from agent.records import DerivedRow, Frame, Quality
from agent.siteplan.load import load_site
from agent.unit_line import UnitLine
from model.calibration import CORRECTIONS, Calibration
from model.corrections import Corrections
from model.gas import build_surface
from model.quantities import PROBABILITY_SUFFIX, UNCERTAINTY_SUFFIX
from model.surface import GasSurface

ROOT = Path(__file__).resolve().parents[2]
START = 1_790_000_000


@lru_cache(maxsize=1)
def gas() -> GasSurface:
    unit = load_site(ROOT / "simulator" / "sites" / "ostmere.yaml").unit("K-110").unit
    return build_surface(unit.composition, unit.domain)


def line() -> UnitLine:
    return UnitLine(
        load_site(ROOT / "simulator" / "sites" / "ostmere.yaml").unit("K-110"), gas(), configuration=1
    )


STEADY = {
    "stage1.suction_pressure": 29.8e5, "stage1.discharge_pressure": 70.4e5,
    "stage1.suction_temperature": 303.0, "stage1.discharge_temperature": 374.0, "unit.speed": 94.2,
    "unit.flow": 252.0, "unit.electrical_power": 69e4, "unit.load_step": 0.0, "unit.run_signal": 1.0,
}  # fmt: skip


def frames(count: int) -> list[Frame]:
    """A slow swing of the suction pressure with noise, a lost reading, a stop and a load step among it."""
    names = line().plan.input_names()
    rng = np.random.default_rng(3)
    made = []
    for k in range(count):
        values = np.array([STEADY[n] for n in names])
        values[:7] *= 1 + 2e-3 * rng.standard_normal(values[:7].size)
        values[names.index("stage1.suction_pressure")] *= 1 - 0.03 * k / count
        values[names.index("unit.load_step")] = float(k % count > 0.8 * count)
        values[names.index("unit.run_signal")] = float(not 0.3 < k / count < 0.35)
        quality = np.zeros(values.size, np.uint8)
        if k == 5:
            values[0], quality[0] = np.nan, Quality.BAD
        made.append(
            Frame(
                unit="K-110", tick=START + k, values=values.astype(np.float32), quality=quality,
                ages=np.zeros(values.size, np.float32),
            )
        )  # fmt: skip
    return made


def same(first: Sequence[DerivedRow], second: Sequence[DerivedRow]) -> None:
    for one, other in zip(first, second, strict=True):
        assert one.tick == other.tick
        assert np.array_equal(one.quality, other.quality)
        # rows are stored as float32: its last place is 1.2e-7 of the value
        assert np.allclose(one.values, other.values, rtol=2e-7, atol=1e-12, equal_nan=True)


@pytest.mark.parametrize(("count", "size"), [(40, 7), (40, 200)])
def test_live_numbers_do_not_hang_on_the_batch(count: int, size: int) -> None:
    rows = frames(count)
    single, parts = line(), line()
    one_by_one = [row for frame in rows for row in single.live([frame])]
    in_parts = [row for k in range(0, count, size) for row in parts.live(rows[k : k + size])]
    same(one_by_one, in_parts)


def test_late_frames_get_the_numbers_they_would_have_had_live() -> None:
    """Frames in the middle of a steady run, alone and out of order, from a line that has seen others."""
    rows = frames(40)[20:26]
    straight, busy = line(), line()
    live = straight.live(frames(40))[20:26]
    busy.live(frames(40)[:10])
    again = busy.again(rows[::-1])
    running = live[0].values.size
    place = straight.plan.result_names().index("unit.run_state")
    kept = [k for k in range(running) if k != place]
    for one, other in zip(live, again, strict=True):
        both = (one.quality[kept] <= Quality.UNCERTAIN) & (other.quality[kept] <= Quality.UNCERTAIN)
        assert np.allclose(one.values[kept][both], other.values[kept][both], rtol=2e-7, atol=1e-12)


def test_a_row_holds_the_uncertainty_of_estimates_and_the_probability_beside_margins() -> None:
    found = line()
    names = found.plan.result_names()
    row = found.live(frames(12))[-1]
    values = dict(zip(names, row.values.tolist(), strict=True))
    assert values["cylinder1.reversal_degrees" + UNCERTAINTY_SUFFIX] > 0
    marks = dict(zip(names, row.quality.tolist(), strict=True))
    margins = [n for n in names if n.endswith("_margin")]
    for name in margins:
        assert marks[name + PROBABILITY_SUFFIX] == marks[name]
        if marks[name] == Quality.GOOD:
            assert 0 <= values[name + PROBABILITY_SUFFIX] <= 1
    assert any(marks[name] == Quality.GOOD for name in margins)


def test_a_calibration_is_taken_up_from_the_next_frame_on() -> None:
    variance = np.diag([0.01**2] * len(CORRECTIONS))
    calibration = Calibration(
        version=1, corrections={0: Corrections(volumetric_deficit=0.02)}, covariance={0: variance},
        frames={0: 40}, power_factor=None, power_factor_standard=None, misfit=1.0, readings=3, first=0.0,
        last=1.0, who="a", when=1.0, why="b",
    )  # fmt: skip
    one = line()
    name = "stage1.volumetric_efficiency"
    place, u = (one.plan.result_names().index(n) for n in (name, name + UNCERTAINTY_SUFFIX))
    rows = frames(12)
    plain = one.again(rows)[-1].values
    one.use(calibration)
    taught = one.again(rows)[-1].values
    assert taught[place] == pytest.approx(plain[place] - 0.02, abs=1e-6)  # hand
    assert taught[u] >= np.hypot(plain[u], 0.01) * 0.95
    one.use(None)
    assert one.again(rows)[-1].values[place] == plain[place]
