"""Tables against the crank-angle machine at random points off their nodes: healthy, one fault, two faults.

Resumable: every point that was run is kept in tests/results/tmp/ and not run again.
"""

import argparse
import json
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from importlib.resources import files
from pathlib import Path

import numpy as np

from agent.siteplan.load import load_site
from model.machine import Side, Unit
from simulator.equipment import Surroundings
from simulator.faults import FaultKind
from simulator.gas_data import Floats
from simulator.machine import Machine
from simulator.ordinary_life import HABITS
from simulator.ostmere import EQUIPMENT, SEED, USUAL
from simulator.outcome import MachineOutcome
from simulator.plant import LIVE_STEPS
from simulator.tabulate import Table, Tabulator
from simulator.tabulate_domain import Spot, domain_of, gas_shares
from simulator.tabulate_store import source_digest
from tests.bench._result import RESULTS, write_result

K = FaultKind
BARS = {"flow %": 0.3, "pressure %": 0.3, "power %": 0.5, "discharge temperature K": 0.4, "reversal deg": 2.0}

Two = tuple[tuple[Spot, float], tuple[Spot, float]]


def _end(kind: FaultKind, cylinder: int, side: Side, size: float) -> tuple[Spot, float]:
    return Spot(kind=kind, cylinder=cylinder, side=side), size


def _cylinder(kind: FaultKind, cylinder: int, size: float) -> tuple[Spot, float]:
    return Spot(kind=kind, cylinder=cylinder), size


_FOULED = (Spot(kind=K.COOLER_FOULING, stage=1), 0.5)
_RECYCLE = (Spot(kind=K.FIRST_RECYCLE_PASSING), 0.015)
_RING = _cylinder(K.RING_LEAK, 3, 0.002)
H, C = Side.HEAD, Side.CRANK

# unit -> load step, and two faults that may occur at once with their largest sizes
CASES: Mapping[str, Sequence[tuple[str, Two]]] = {
    "K-110": (
        ("100", (_end(K.DISCHARGE_VALVE_LEAK, 1, H, 0.002), _cylinder(K.RING_LEAK, 2, 0.002))),
        ("100", (_end(K.SUCTION_VALVE_LEAK, 2, C, 0.002), _cylinder(K.PACKING_LEAK, 2, 0.0005))),
        ("50", (_end(K.DISCHARGE_VALVE_LEAK, 1, C, 0.001), _cylinder(K.PACKING_LEAK, 2, 0.0005))),
    ),
    "K-220": (
        ("100", (_end(K.SUCTION_VALVE_LEAK, 3, H, 0.002), _FOULED)),
        ("100", (_end(K.DISCHARGE_VALVE_LEAK, 4, C, 0.0015), _cylinder(K.RING_LEAK, 1, 0.0015))),
        ("50-head-open", (_end(K.SUCTION_VALVE_LEAK, 3, C, 0.001), _FOULED)),
    ),
    "K-330": (
        ("100", (_RING, _FOULED)),
        ("100", (_end(K.DISCHARGE_VALVE_LEAK, 1, H, 0.0015), _RECYCLE)),
        ("50", (_cylinder(K.RING_LEAK, 3, 0.001), _FOULED)),
    ),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Points:
    """Random boundaries and fault sizes of one case."""

    values: Mapping[str, Floats]
    names: tuple[str, ...]
    composition: Floats
    sizes: Floats


def around_of(unit: Unit, word: str) -> Surroundings:
    held = next(s.held_open for s in unit.load_steps if s.word == word)
    return replace(USUAL[unit.id], held_open=held, composition=unit.composition)


def random_points(unit: Unit, largest: Sequence[float], count: int, seed: int) -> Points:
    """A third without fault, a third with one, a third with both."""
    chance = np.random.default_rng([seed, len(unit.id), ord(unit.id[2])])
    usual, habits = USUAL[unit.id], HABITS[unit.id]

    def wandering(value: float, share: float) -> Floats:
        return value * (1.0 + share * chance.uniform(-1.0, 1.0, count))

    values = {
        "suction_pressure_pa": wandering(usual.suction_pressure_pa, 1.3 * habits.suction + 0.01),
        "discharge_pressure_pa": wandering(usual.discharge_pressure_pa, 1.3 * habits.discharge + 0.01),
        "suction_temperature_k": usual.suction_temperature_k + chance.uniform(-7.0, 7.0, count),
        "cooling_water_k": chance.uniform(289.0, 307.0, count),
    }
    if habits.speed:
        values["speed_rad_s"] = usual.speed_rad_s * (1.0 - habits.speed * chance.uniform(0.0, 1.0, count))
    assert habits.heavier is not None
    names = tuple(unit.composition)
    ends = [np.array([gas[n] for n in names]) for gas in (unit.composition, habits.heavier)]
    share = chance.uniform(0.0, 1.0, (count, 1))
    sizes = chance.uniform(0.0, 1.0, (count, len(largest))) * np.array(largest)
    sizes[: count // 3] = 0.0
    single = np.arange(count // 3, 2 * count // 3)
    sizes[single, single % 2] = 0.0
    return Points(
        values=values, names=names, composition=(1.0 - share) * ends[0] + share * ends[1], sizes=sizes
    )


def make_table(unit: Unit, case: int, folder: Path | None) -> tuple[Table, Tabulator]:
    word, spots = CASES[unit.id][case]
    scatter = random_points(unit, [s for _, s in spots], 3000, seed=1)
    domain = domain_of(around_of(unit, word), scatter.values, (scatter.names, scatter.composition))
    tabulator = Tabulator(unit, EQUIPMENT[unit.id], SEED, steps=LIVE_STEPS, folder=folder)
    return tabulator.table(domain, spots), tabulator


def full_runs(unit: Unit, table: Table, points: Points) -> Iterator[MachineOutcome]:
    """The machine itself, turned until it rests by its own rule, twenty turns averaged."""
    machine: Machine | None = None
    for i in range(len(points.sizes)):
        composition = dict(zip(points.names, (float(y) for y in points.composition[i]), strict=True))
        fields = {name: float(v[i]) for name, v in points.values.items()}
        around = replace(table.domain.usual, composition=composition, **fields)
        faults = table.domain.faults(table.spots, [float(s) for s in points.sizes[i]])
        if machine is None:
            machine = Machine(unit, EQUIPMENT[unit.id], around, SEED, steps=LIVE_STEPS)
        machine.change(around=around, faults=faults)
        machine.hasten(30)
        yield machine.settle(averaged=20)


def errors(unit: Unit, got: Mapping[str, Floats], i: int, true: MachineOutcome) -> dict[str, float]:
    """Worst errors of one point, by bar."""

    def share(name: str, value: float) -> float:
        return 100.0 * abs(float(got[name][i]) / value - 1.0)

    temperatures = [
        abs(float(got[f"stage{s.number}.discharge_temperature_k"][i]) - s.discharge_temperature_k)
        for s in true.stages
    ]
    pressures = [
        share(f"stage{s.number}.{side}_pressure_pa", getattr(s, f"{side}_pressure_pa"))
        for s in true.stages
        for side in ("suction", "discharge")
    ]
    turned = [
        abs(np.degrees(float(got[f"cylinder{c.number}.reversal_rad"][i]) - c.reversal.angle_rad))
        for c in true.cylinders
    ]
    flows, powers = ("inlet_dry_mol_s", "export_dry_mol_s"), ("electrical_power_w", "indicated_power_w")
    return {
        "flow %": max(share(name, getattr(true, name)) for name in flows),
        "pressure %": max(pressures),
        "power %": max(share(name, getattr(true, name)) for name in powers),
        "discharge temperature K": max(temperatures),
        "reversal deg": max(turned),
    }  # fmt: skip


def compare(
    unit: Unit, case: int, count: int, *, seed: int, folder: Path | None, kept: Path | None
) -> list[dict[str, float]]:
    """Errors at random points; ``kept`` is where they are remembered."""
    known = [json.loads(line) for line in kept.read_text().splitlines()] if kept and kept.exists() else []
    if len(known) >= count:
        return known[:count]
    table, _ = make_table(unit, case, folder)
    points = random_points(unit, table.largest, count, seed)
    got = table.values(
        {**points.values, **gas_shares(table.domain, points.names, points.composition)}, points.sizes
    )
    rest = Points(
        values={n: v[len(known) :] for n, v in points.values.items()}, names=points.names,
        composition=points.composition[len(known) :], sizes=points.sizes[len(known) :],
    )  # fmt: skip
    for i, true in enumerate(full_runs(unit, table, rest), start=len(known)):
        known.append({**errors(unit, got, i, true), "faults": float((points.sizes[i] > 0.0).sum())})
        if kept is not None:
            with kept.open("a") as file:
                file.write(json.dumps(known[-1]) + "\n")
    return known


def summary(rows: Sequence[Mapping[str, float]]) -> dict[str, object]:
    found: dict[str, object] = {"points": len(rows)}
    for bar, limit in BARS.items():
        values = np.array([row[bar] for row in rows])
        found[bar] = {
            "max": round(float(values.max()), 4),
            "p95": round(float(np.quantile(values, 0.95)), 4),
            "median": round(float(np.median(values)), 4),
            "bar": limit,
            "beyond bar": int((values > limit).sum()),
        }
    return found


def main(argv: Sequence[str]) -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench tabulation")
    parser.add_argument("--points", type=int, default=102, help="a case; three cases a unit")
    parser.add_argument("--seed", type=int, default=1000)
    words = parser.parse_args(argv)
    site = load_site(Path(str(files("simulator") / "sites" / "ostmere.yaml")))
    folder = RESULTS / "tmp" / "tabulation"
    folder.mkdir(parents=True, exist_ok=True)
    figures: dict[str, object] = {}
    within = True
    for plan in site.units:
        unit, rows = plan.unit, []
        begun = time.process_time()
        for case, (word, spots) in enumerate(CASES[unit.id]):
            kept = folder / f"{unit.id}-{case}-{source_digest()}-{words.seed}.jsonl"
            rows += (found := compare(unit, case, words.points, seed=words.seed, folder=folder, kept=kept))
            name = f"{unit.id} {word}: {', '.join(s.words for s, _ in spots)}"
            figures[name] = summary(found)
            print(name, json.dumps(figures[name]), flush=True)
        by_count = {str(n): summary([r for r in rows if r["faults"] == n]) for n in (0.0, 1.0, 2.0)}
        figures[unit.id] = {**summary(rows), "by number of faults": by_count}
        print(unit.id, round(time.process_time() - begun), "s of CPU", flush=True)
        within &= all(row[bar] <= limit for row in rows for bar, limit in BARS.items())
    write_result("tabulation", {"steps": LIVE_STEPS, **figures}, seeds=[words.seed])
    return 0 if within else 1
