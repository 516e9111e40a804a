"""The model beside the invented plant on healthy cylinders: verification of one of our codes by the other.

Both are ours, so agreement validates neither. The reference cylinder: bore 250, rod 65, stroke 150,
connecting rod 400 mm, clearances 15 and 17 %, effective valve areas 5.5 %, 250 kg; suction 20 bar(a) and
308 K; two gases, 300, 600 and 1000 rpm, pressure ratios 1.3 to 5. One set of corrections a gas, taught with
priors on all cases, or on the ratios 2 and 4 alone and scored on the others; beside them the default
corrections, and machines that differ from their nameplate by a sealed draw which the model does not know.
"""

import argparse
import itertools
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[2] / ".pytest_cache" / "plant"))

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.evaluate import Measured, evaluate
from model.gas import build_surface
from model.machine import Cylinder, End, GasDomain, LoadStep, Side, Stage, Unit
from model.surface import GasSurface
from simulator.equipment import (
    NOMINAL,
    Driver,
    DriverKind,
    Equipment,
    SealedDraw,
    StageEquipment,
    Surroundings,
)
from simulator.machine import Machine
from tests.bench._result import RESULTS, write_result

Array = NDArray[np.float64]

GASES: Final[Mapping[str, Mapping[str, float]]] = {
    "natural gas": {
        "methane": 0.900, "ethane": 0.050, "propane": 0.015, "n-butane": 0.005, "nitrogen": 0.015,
        "carbon dioxide": 0.015,
    },
    "hydrogen-rich": {
        "hydrogen": 0.900, "methane": 0.070, "ethane": 0.015, "propane": 0.005, "nitrogen": 0.010,
    },
}  # fmt: skip
SPEEDS_RPM: Final = (300.0, 600.0, 1000.0)
RATIOS: Final = (1.3, 2.0, 3.0, 4.0, 5.0)
SOME: Final = (2.0, 4.0)
SUCTION_PA: Final = 20e5
SUCTION_K: Final = 308.0
RPM: Final = math.pi / 30
QUANTITIES: Final = ("ve_pt", "power_pct", "td_k", "tension_pct", "compression_pct", "reversal_deg")
# root mean square and worst, as the project's bars say
BARS: Final = {
    "ve_pt": (0.8, 1.5), "power_pct": (1.5, 4.0), "td_k": (1.0, 2.0), "tension_pct": (2.0, 6.0),
    "compression_pct": (2.0, 6.0), "reversal_deg": (1.0, 3.0),
}  # fmt: skip
# what a fit may move, how far it is trusted, and how well each quantity can be met at all
FREE: Final = (
    "preheat",
    "valve_loss",
    "valve_full_lift",
    "heat_loss",
    "volumetric_deficit",
    "opening_overshoot",
)
PRIOR: Final = np.array([0.02, 0.3, 0.01, 0.02, 0.02, 0.3])
SCALES: Final = np.array([0.5, 1.0, 0.6, 1.5, 1.5, 0.8])


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    gas: str
    rpm: float
    ratio: float


def unit(gas: str) -> Unit:
    ends = tuple(
        End(side=side, clearance=c, suction_area_ratio=0.055, discharge_area_ratio=0.055)
        for side, c in ((Side.HEAD, 0.15), (Side.CRANK, 0.17))
    )
    only = Cylinder(
        number=1, bore_m=0.25, rod_diameter_m=0.065, reciprocating_mass_kg=250.0,
        valve_natural_frequency_hz=100.0, ends=ends,
    )  # fmt: skip
    return Unit(
        id="reference", name="reference cylinder", service=gas, stroke_m=0.15, connecting_rod_m=0.40,
        rated_speed_rad_s=600 * RPM, ambient_pressure_pa=1.013e5, composition=GASES[gas],
        domain=GasDomain(
            low_temperature_k=270, high_temperature_k=520, low_pressure_pa=1e5, high_pressure_pa=125e5
        ),
        stages=(Stage(number=1, cylinders=(only,)),),
        load_steps=(LoadStep(word="100", index=0, held_open=frozenset()),),
    )  # fmt: skip


def cases(gas: str) -> list[Case]:
    return [Case(gas=gas, rpm=n, ratio=r) for n, r in itertools.product(SPEEDS_RPM, RATIOS)]


def plant_row(case: Case, draw: SealedDraw, steps: int = 3600) -> Array:
    """VE [pt], power [W], discharge temperature [K], pin tension and compression [N], reversal [deg]."""
    discharge = SUCTION_PA * case.ratio
    machine = Machine(
        unit(case.gas),
        Equipment(
            stages=(StageEquipment(design_suction_pa=SUCTION_PA, design_discharge_pa=discharge),),
            phases_deg=(0.0,), design_flow_mol_s=100.0, design_suction_temperature_k=SUCTION_K,
            driver=Driver(kind=DriverKind.VARIABLE, rated_power_w=5e5), pinned=True,
        ),
        Surroundings(
            suction_pressure_pa=SUCTION_PA, suction_temperature_k=SUCTION_K, discharge_pressure_pa=discharge,
            speed_rad_s=case.rpm * RPM,
        ),
        draw,
        steps=steps,
    )  # fmt: skip
    found = machine.settle(averaged=30).cylinder(1)
    nameplate = unit(case.gas).cylinder(1)[1]
    areas = {side: nameplate.area_m2(side) for side in Side}
    ve = sum(e.volumetric_efficiency * areas[e.side] for e in found.ends) / sum(areas.values())
    return np.array(
        [100 * ve, found.indicated_power_w, found.delivered_temperature_k, found.pin_load_tension_n,
         found.pin_load_compression_n, math.degrees(found.reversal.angle_rad)]
    )  # fmt: skip


def model_rows(gas: str, surface: GasSurface, corrections: Corrections) -> Array:
    """The same of the model, a row a case."""
    names = (
        "stage1.suction_pressure",
        "stage1.discharge_pressure",
        "stage1.suction_temperature",
        "unit.speed",
    )
    frames = [[SUCTION_PA, SUCTION_PA * c.ratio, SUCTION_K, c.rpm * RPM] for c in cases(gas)]
    what = unit(gas)
    found = evaluate(what, surface, corrections, Measured.from_inputs(what, names, frames))

    def column(name: str) -> Array:
        return found.column(name).values

    return np.column_stack(
        [100 * column("stage1.volumetric_efficiency"), column("stage1.stage_power"),
         column("stage1.expected_discharge_temperature"), column("cylinder1.pin_load_tension"),
         column("cylinder1.pin_load_compression"), np.degrees(column("cylinder1.reversal_degrees"))]
    )  # fmt: skip


def differences(model: Array, plant: Array) -> Array:
    """Model less plant in the units of `QUANTITIES`."""
    relative = 100 * (model / plant - 1)
    plain = model - plant
    return np.column_stack(
        [plain[:, 0], relative[:, 1], plain[:, 2], relative[:, 3], relative[:, 4], plain[:, 5]]
    )


def taught(gas: str, surface: GasSurface, plant: Array, ratios: Sequence[float] = RATIOS) -> Corrections:
    """One set of corrections for a gas, from the cases of some ratios."""
    rows = np.array([c.ratio in ratios for c in cases(gas)])
    start = Corrections.nominal()
    mean = np.array([getattr(start, name) for name in FREE])

    def residual(x: Array) -> Array:
        there = replace(start, **dict(zip(FREE, x.tolist(), strict=True)))
        off = differences(model_rows(gas, surface, there), plant)[rows] / SCALES
        return np.concatenate([off.ravel(), (x - mean) / PRIOR])

    x = mean.copy()
    for _ in range(6):
        here = residual(x)
        step = 0.05 * PRIOR
        slopes = np.column_stack(
            [(residual(x + d) - here) / s for d, s in zip(np.diag(step), step, strict=True)]
        )
        x = x - np.linalg.lstsq(slopes, here, rcond=None)[0]
    return replace(start, **dict(zip(FREE, x.tolist(), strict=True)))


def summary(off: Array) -> dict[str, dict[str, float]]:
    return {
        name: {
            "rms": round(float(np.sqrt((off[:, k] ** 2).mean())), 2),
            "worst": round(float(np.abs(off[:, k]).max()), 2),
        }
        for k, name in enumerate(QUANTITIES)
    }


def within(found: Mapping[str, Mapping[str, float]]) -> list[str]:
    """Quantities that miss their bars."""
    return [n for n, (rms, worst) in BARS.items() if found[n]["rms"] > rms or found[n]["worst"] > worst]


def main(argv: Sequence[str]) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench model_against_plant")
    parser.add_argument("--seeds", type=int, nargs="*", default=[1000, 1001, 1002, 1003, 1004])
    seeds = parser.parse_args(argv).seeds
    figures: dict[str, object] = {"what": "verification: model less plant, healthy reference cylinder"}
    lines = []
    for gas in GASES:
        surface = build_surface(unit(gas).composition, unit(gas).domain)
        plant = np.array([plant_row(c, NOMINAL) for c in cases(gas)])
        corrections = taught(gas, surface, plant)
        off = differences(model_rows(gas, surface, corrections), plant)
        unseen = np.array([c.ratio not in SOME for c in cases(gas)])
        some = differences(model_rows(gas, surface, taught(gas, surface, plant, SOME)), plant)
        default = differences(model_rows(gas, surface, Corrections.nominal()), plant)
        drawn = []
        for seed in seeds:
            other = np.array([plant_row(c, SealedDraw.from_seed(seed, gas)) for c in cases(gas)])
            drawn.append(differences(model_rows(gas, surface, corrections), other))
        parts = {
            "one set": off, "taught on ratios 2 and 4, the others": some[unseen],
            "default corrections": default, "one set, sealed draws": np.concatenate(drawn),
        }  # fmt: skip
        figures[gas] = {
            "corrections": {n: round(getattr(corrections, n), 4) for n in FREE},
            "plant": [
                {"rpm": c.rpm, "ratio": c.ratio, "ve_pct": round(p[0], 2), "power_kw": round(p[1] / 1e3, 2),
                 "td_k": round(p[2], 2), "tension_kn": round(p[3] / 1e3, 2),
                 "compression_kn": round(p[4] / 1e3, 2),
                 "reversal_deg": round(p[5], 2), "model_less_plant": [round(float(x), 2) for x in o]}
                for c, p, o in zip(cases(gas), plant, off, strict=True)
            ],
        } | {name: summary(part) for name, part in parts.items()}  # fmt: skip
        figures[f"{gas}: misses of the bars, one set"] = within(summary(off))
        lines += _table(gas, parts)
    write_result("model_against_plant", figures, seeds=list(seeds))
    (RESULTS / "model_against_plant.md").write_text("\n".join(_head() + lines) + "\n", encoding="utf-8")
    print("\n".join(lines))
    return 0


def _head() -> list[str]:
    return [
        "# Model less plant on healthy cylinders", "",
        "Verification, not validation: both codes are this project's own. Root mean square / worst.", "",
        "| set | VE, points | power, % | Td, K | pin tension, % | pin compression, % | reversal, degrees |",
        "|---|---|---|---|---|---|---|",
        "| bar | " + " | ".join(f"{r} / {w}" for r, w in BARS.values()) + " |",
    ]  # fmt: skip


def _table(gas: str, parts: Mapping[str, Array]) -> list[str]:
    rows = []
    for name, off in parts.items():
        found = summary(off)
        cells = " | ".join(f"{found[q]['rms']} / {found[q]['worst']}" for q in QUANTITIES)
        rows.append(f"| {gas}: {name} | {cells} |")
    return rows
