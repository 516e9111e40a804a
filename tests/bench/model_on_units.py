"""The model beside the invented plant on its three healthy units, at their usual points.

Verification of one of our codes by the other, not validation. The model gets each stage's own suction and
discharge pressure, suction temperature and speed as the settled plant has them, dry gas, and nothing learned:
once with a machine as on its nameplate, once with the one that was built (sealed draw of the site) and with
others that might have been. The bars hold for the reference cylinder and are shown for scale.
"""

import argparse
import math
import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from importlib.resources import files
from pathlib import Path
from typing import Final

os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[2] / ".pytest_cache" / "plant"))

import numpy as np
from numpy.typing import NDArray

from agent.siteplan.load import load_site
from model.corrections import Corrections
from model.evaluate import Measured, evaluate
from model.gas import build_surface
from model.machine import Unit
from simulator.equipment import NOMINAL, SealedDraw
from simulator.machine import Machine
from simulator.ostmere import EQUIPMENT, SEED, USUAL
from simulator.outcome import MachineOutcome
from tests.bench._result import RESULTS, write_result
from tests.bench.model_against_plant import BARS, QUANTITIES

Array = NDArray[np.float64]

NAMES: Final = ("K-110", "K-220", "K-330")


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """Model less plant of one cylinder and its stage, in the units of `QUANTITIES`."""

    unit: str
    machine: str
    cylinder: int
    off: tuple[float, ...]


def plant(unit: Unit, draw: SealedDraw) -> MachineOutcome:
    around = replace(USUAL[unit.id], saturation=0.0)
    machine = Machine(unit, EQUIPMENT[unit.id], around, draw, steps=1800)
    machine.settle()
    return machine.hasten(30)


def compare(unit: Unit, machine: str, got: MachineOutcome) -> list[Row]:
    """Give the model the plant's stage states and take the differences."""
    names, frame = ["unit.speed", "unit.load_step"], [got.speed_rad_s, 0.0]
    for stage in got.stages:
        names += [
            f"stage{stage.number}.{n}"
            for n in ("suction_pressure", "discharge_pressure", "suction_temperature")
        ]
        frame += [stage.suction_pressure_pa, stage.discharge_pressure_pa, stage.suction_temperature_k]
    surface = build_surface(unit.composition, unit.domain)
    found = evaluate(unit, surface, Corrections.nominal(), Measured.from_inputs(unit, names, [frame]))

    def of(name: str) -> float:
        return float(found.column(name).values[0])

    rows = []
    for nameplate, stage in zip(unit.stages, got.stages, strict=True):
        swept = ve = 0.0
        for cylinder in nameplate.cylinders:
            for end in got.cylinder(cylinder.number).ends:
                swept += cylinder.area_m2(end.side)
                ve += cylinder.area_m2(end.side) * end.volumetric_efficiency
        k = f"stage{stage.number}"
        ours = (of(f"{k}.volumetric_efficiency"), of(f"{k}.stage_power"))
        hot = of(f"{k}.expected_discharge_temperature")
        for cylinder in nameplate.cylinders:
            c, it = f"cylinder{cylinder.number}", got.cylinder(cylinder.number)
            off = (
                100.0 * (ours[0] - ve / swept),
                100.0 * (ours[1] / stage.indicated_power_w - 1.0),
                hot - stage.discharge_temperature_k,
                100.0 * (of(f"{c}.pin_load_tension") / it.pin_load_tension_n - 1.0),
                100.0 * (of(f"{c}.pin_load_compression") / it.pin_load_compression_n - 1.0),
                math.degrees(of(f"{c}.reversal_degrees") - it.reversal.angle_rad),
            )
            rows.append(Row(unit=unit.id, machine=machine, cylinder=cylinder.number, off=off))
    return rows


def table(rows: Sequence[Row]) -> list[str]:
    lines = [
        "# Model less plant on the three units at their usual points", "",
        "Verification, not validation: both codes are this project's own. Nothing learned, dry gas. VE,",
        "power and Td are those of the cylinder's stage. Bold: beyond the reference cylinder's bar.", "",
        "| unit, machine | cylinder | VE, pt | power, % | Td, K | tension, % | compression, % | reversal |",
        "|---" * 8 + "|",
        "| largest of the bar | | " + " | ".join(str(BARS[q][1]) for q in QUANTITIES) + " |",
    ]  # fmt: skip
    for row in rows:
        cells = []
        for name, x in zip(QUANTITIES, row.off, strict=True):
            cells.append(f"{x:+.2f}" if abs(x) <= BARS[name][1] else f"**{x:+.2f}**")
        lines.append(f"| {row.unit}, {row.machine} | {row.cylinder} | " + " | ".join(cells) + " |")
    return lines


def main(argv: Sequence[str]) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench model_on_units")
    parser.add_argument("--seeds", type=int, nargs="*", default=[1000, 1001, 1002])
    seeds = parser.parse_args(argv).seeds
    site = load_site(Path(str(files("simulator") / "sites" / "ostmere.yaml")))
    rows = []
    for name in NAMES:
        unit = site.unit(name).unit
        draws = [("as on its nameplate", NOMINAL), ("as built", SealedDraw.from_seed(SEED, name))]
        draws += [(f"draw {seed}", SealedDraw.from_seed(seed, name)) for seed in seeds]
        for machine, draw in draws:
            rows += compare(unit, machine, plant(unit, draw))
    as_plate = np.array([r.off for r in rows if r.machine == "as on its nameplate"])
    others = np.array([r.off for r in rows if r.machine != "as on its nameplate"])
    figures: dict[str, object] = {
        "what": "verification: model, nothing learned, less plant; healthy units at their usual points",
        "worst as on the nameplate": _worst(as_plate),
        "worst of sealed draws": _worst(others),
        "rows": [
            {"unit": r.unit, "machine": r.machine, "cylinder": r.cylinder}
            | {n: round(x, 2) for n, x in zip(QUANTITIES, r.off, strict=True)}
            for r in rows
        ],
    }
    write_result("model_on_units", figures, seeds=[SEED, *seeds])
    text = "\n".join(table(rows)) + "\n"
    (RESULTS / "model_on_units.md").write_text(text, encoding="utf-8")
    print(text)
    return 0


def _worst(off: Array) -> dict[str, float]:
    return {n: round(float(np.abs(off[:, k]).max()), 2) for k, n in enumerate(QUANTITIES)}
