"""Trains for the tests: the three-stage machine with invented coolers and piping, and what holds it."""

from typing import Any

import numpy as np

from model.corrections import Corrections
from model.train import Lines, TrainBoundary, TrainSolution, solve_train
from model.train_streams import StageLine
from tests.model.nameplates import RPM, make_up
from tests.model.surfaces import hydrogen_rich

LINES = Lines(
    design_flow_mol_s=395.0, inlet_drop=0.004,
    stages=tuple(StageLine(cooler_effectiveness=e, drop=0.0055) for e in (0.925, 0.93, 0.90)),
)  # fmt: skip
STEPS = 3


def held(**changed: Any) -> TrainBoundary:
    """What holds the three-stage machine, at design but for what is given."""
    usual = {
        "suction_pressure_pa": np.array([18e5]), "suction_temperature_k": 308.0,
        "discharge_pressure_pa": 140e5, "speed_rad_s": 375 * RPM, "load_step": 0, "cooling_k": 303.0,
        "water_saturation": 1.0,
    }  # fmt: skip
    return TrainBoundary(**usual | changed)


def various(frames: int, seed: int = 1) -> TrainBoundary:
    """Headers within 20 % of design, on every load step, some with a recycle."""
    draw = np.random.default_rng(seed)
    return held(
        suction_pressure_pa=18e5 * draw.uniform(0.8, 1.2, frames),
        discharge_pressure_pa=140e5 * draw.uniform(0.8, 1.2, frames),
        load_step=draw.integers(0, STEPS, frames),
        first_recycle_share=np.where(draw.random(frames) < 0.3, 0.15, 0.0),
        cooling_k=draw.uniform(293.0, 308.0, frames)[:, None],
    )


def solve(boundary: TrainBoundary, **more: Any) -> TrainSolution:
    return solve_train(make_up(), hydrogen_rich(), Corrections.nominal(), boundary, **{"lines": LINES} | more)
