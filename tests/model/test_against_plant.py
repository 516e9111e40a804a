"""The model beside the invented plant on a healthy cylinder: verification of one of our codes by the other.

The whole table, and what the model makes of machines that are not as their nameplate says, is the bench
`model_against_plant`.
"""

from dataclasses import replace

import numpy as np
import pytest

from model.gas import build_surface
from simulator.equipment import NOMINAL
from tests.bench.model_against_plant import (
    BARS,
    QUANTITIES,
    cases,
    differences,
    model_rows,
    plant_row,
    summary,
    taught,
    unit,
)

# Plates of the light gas flutter at the highest speed and close late at the highest ratio: missed there.
BEYOND = {("hydrogen-rich", 1000.0, 5.0)}


@pytest.mark.slow
@pytest.mark.parametrize("gas", ["natural gas", "hydrogen-rich"])
def test_one_set_of_corrections_meets_the_plant_on_healthy_cylinders(gas: str) -> None:
    surface = build_surface(unit(gas).composition, unit(gas).domain)
    plant = np.array([plant_row(case, NOMINAL, steps=1800) for case in cases(gas)])
    off = differences(model_rows(gas, surface, taught(gas, surface, plant)), plant)
    kept = np.array([(c.gas, c.rpm, c.ratio) not in BEYOND for c in cases(gas)])
    assert kept.sum() >= 14
    found = summary(off[kept])
    for name in QUANTITIES:
        rms, worst = BARS[name]  # the project's bars for this comparison
        assert found[name]["rms"] <= rms, name
        assert found[name]["worst"] <= worst, name


@pytest.mark.slow
def test_that_comparison_can_fail() -> None:
    """The plant with valves of two thirds of the area is not met by what was taught on the other."""
    gas = "natural gas"
    surface = build_surface(unit(gas).composition, unit(gas).domain)
    plant = np.array([plant_row(case, NOMINAL, steps=1200) for case in cases(gas)])
    other = np.array([plant_row(case, replace(NOMINAL, valve_area=0.67), steps=1200) for case in cases(gas)])
    off = differences(model_rows(gas, surface, taught(gas, surface, plant)), other)
    assert summary(off)["power_pct"]["worst"] > BARS["power_pct"][1]
