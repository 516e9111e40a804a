"""Tables against the machine they were made from; domains that refuse; sheets that are kept."""

import os
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

# Machine code of the plant is kept between test runs; a change of its sources makes it anew.
os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[2] / ".pytest_cache" / "plant"))

from agent.siteplan.load import load_site
from model.machine import Side
from simulator.faults import FaultKind, Faults
from simulator.kinematics import reversal
from simulator.machine import Machine
from simulator.ostmere import EQUIPMENT, SEED, USUAL
from simulator.plant_main import scenario_path
from simulator.settling import Settler
from simulator.tabulate import Table, TableError, Tabulator
from simulator.tabulate_columns import reversals
from simulator.tabulate_domain import OutsideTableError, Spot, domain_of, gas_shares, rounded_up
from simulator.tabulate_store import canonical, source_digest
from tests.bench.tabulation import BARS, CASES, compare

SITE = load_site(scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml")
UNITS = {u.id: u.unit for u in SITE.units}
USUALLY = replace(USUAL["K-110"], composition=UNITS["K-110"].composition)
STEPS = 1200  # a turn; with fewer the machine is too rough for a table
LEAK = Spot(kind=FaultKind.DISCHARGE_VALVE_LEAK, cylinder=1, side=Side.HEAD)
LEAK_TOO = Spot(kind=FaultKind.DISCHARGE_VALVE_LEAK, cylinder=2, side=Side.HEAD)
VISITED = {
    "suction_pressure_pa": np.array([29.0e5, 31.0e5]),
    "discharge_pressure_pa": np.array([69.0e5, 71.0e5]),
}
DOMAIN = domain_of(USUALLY, VISITED)


def tabulator(folder: Path | None = None) -> Tabulator:
    return Tabulator(UNITS["K-110"], EQUIPMENT["K-110"], SEED, steps=STEPS, folder=folder)


@pytest.fixture(scope="module", name="folder")
def make_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("sheets")


@pytest.fixture(scope="module", name="table")
def make_table(folder: Path) -> Table:
    return tabulator(folder).table(DOMAIN, [(LEAK, 0.001)])


def machine() -> Machine:
    return Machine(UNITS["K-110"], EQUIPMENT["K-110"], USUALLY, SEED, steps=STEPS)


def test_a_table_agrees_with_the_machine_off_its_nodes(table: Table) -> None:
    turned = machine()
    for suction, discharge, size in ((29.3e5, 70.7e5, 0.0), (30.8e5, 69.2e5, 0.0007)):
        around = replace(USUALLY, suction_pressure_pa=suction, discharge_pressure_pa=discharge)
        faults = Faults(present=(LEAK.fault(size),)) if size else Faults()
        turned.change(around=around, faults=faults)
        turned.hasten(60)
        true = turned.settle()
        at = {"suction_pressure_pa": np.array([suction]), "discharge_pressure_pa": np.array([discharge])}
        got = {name: float(v[0]) for name, v in table.values(at, np.array([[size]])).items()}
        assert got["export_dry_mol_s"] == pytest.approx(true.export_dry_mol_s, rel=0.003)
        assert got["electrical_power_w"] == pytest.approx(true.electrical_power_w, rel=0.005)
        stage = true.stages[0]
        assert got["stage1.discharge_pressure_pa"] == pytest.approx(stage.discharge_pressure_pa, rel=0.003)
        assert got["stage1.discharge_temperature_k"] == pytest.approx(stage.discharge_temperature_k, abs=0.4)
        for cylinder in true.cylinders:
            apart = got[f"cylinder{cylinder.number}.reversal_rad"] - cylinder.reversal.angle_rad
            assert abs(np.degrees(apart)) < 2.0


def test_an_array_of_minutes_equals_a_loop(table: Table) -> None:
    at = {
        "suction_pressure_pa": np.array([29.2e5, 30.0e5, 30.9e5]),
        "discharge_pressure_pa": np.array([69.5e5, 70.0e5, 70.3e5]),
    }
    sizes = np.array([[0.0], [0.0004], [0.001]])
    whole = table.values(at, sizes)
    assert set(whole) == set(table.value_names)
    for i in range(3):
        alone = table.values({n: v[i : i + 1] for n, v in at.items()}, sizes[i : i + 1])
        for name, values in whole.items():
            assert values[i] == pytest.approx(alone[name][0], rel=1e-9)


@pytest.mark.parametrize(
    ("values", "size", "name"),
    [
        ({"suction_pressure_pa": 25.0e5, "discharge_pressure_pa": 70.0e5}, 0.0, "suction_pressure_pa"),
        ({"suction_pressure_pa": 30.0e5, "discharge_pressure_pa": 80.0e5}, 0.0, "discharge_pressure_pa"),
        ({"suction_pressure_pa": 30.0e5, "discharge_pressure_pa": 70.0e5}, 0.002, LEAK.words),
    ],
)
def test_outside_its_domain_a_table_refuses(
    table: Table, values: dict[str, float], size: float, name: str
) -> None:
    with pytest.raises(OutsideTableError, match="outside the table") as told:
        table.values({n: np.array([v]) for n, v in values.items()}, np.array([[size]]))
    assert told.value.name == name


def test_two_faults_at_once_are_refused_where_they_were_not_foreseen(folder: Path) -> None:
    table = tabulator(folder).table(DOMAIN, [(LEAK, 0.001), (LEAK_TOO, 0.001)], together=[])
    at = {"suction_pressure_pa": np.array([30.0e5]), "discharge_pressure_pa": np.array([70.0e5])}
    table.values(at, np.array([[0.0, 0.0004]]))
    with pytest.raises(TableError, match="present at once"):
        table.values(at, np.array([[0.0005, 0.0004]]))


def test_kept_sheets_are_taken_and_give_the_same(table: Table, folder: Path) -> None:
    again = tabulator(folder)
    second = again.table(DOMAIN, [(LEAK, 0.001)])
    assert again.runs == 0
    for members, sheet in table.sheets.items():
        np.testing.assert_array_equal(sheet.weights, second.sheets[members].weights)
    assert list(folder.glob(f"plant-tables-{source_digest()}/*.npz"))


def test_the_key_of_a_sheet_does_not_depend_on_the_order_of_sets() -> None:
    one = frozenset({(1, Side.HEAD), (2, Side.CRANK)})
    assert canonical(one) == canonical(frozenset(reversed(list(one))))
    assert canonical(DOMAIN) != canonical(replace(DOMAIN, usual=replace(USUALLY, jacket_water_k=319.0)))


def test_a_domain_holds_what_was_visited_and_fixes_what_never_moved() -> None:
    assert [a.name for a in DOMAIN.axes] == ["suction_pressure_pa", "discharge_pressure_pa"]
    for axis in DOMAIN.axes:
        assert axis.low < VISITED[axis.name].min() < VISITED[axis.name].max() < axis.high
        np.testing.assert_allclose(axis.scaled(np.array([axis.value(0.3)])), 0.3)
    centre = DOMAIN.surroundings(np.zeros(2))
    assert centre.cooling_water_k == USUALLY.cooling_water_k


def test_compositions_on_a_line_need_one_axis_and_come_back() -> None:
    names = tuple(USUALLY.composition or {})
    first = np.array([(USUALLY.composition or {})[n] for n in names])
    heavier = first + np.where(np.array(names) == "methane", -0.03, 0.0)
    heavier[names.index("ethane")] += 0.03
    visited = first + np.linspace(0.0, 1.0, 9)[:, None] * (heavier - first)
    domain = domain_of(USUALLY, {}, (names, visited))
    assert [a.name for a in domain.axes] == ["gas0"]
    shares = gas_shares(domain, names, visited)["gas0"]
    assert np.abs(shares).max() < 1.0
    for share, row in zip(shares, visited, strict=True):
        mixed = domain.surroundings(np.array([share])).composition or {}
        np.testing.assert_allclose([mixed[n] for n in names], row, atol=1e-12)
        assert sum(mixed.values()) == pytest.approx(1.0)


def test_sizes_are_rounded_up_but_not_beyond_what_a_fault_can_be() -> None:
    assert 0.001 <= rounded_up(0.001, 0.05) < 0.00116
    assert rounded_up(0.049, 0.05) == 0.05
    assert rounded_up(rounded_up(0.001, 0.05), 0.05) == pytest.approx(rounded_up(0.001, 0.05))


def test_settling_quickly_comes_to_the_same_state_as_turning_long() -> None:
    settler, slow = Settler(machine()), machine()
    for suction, size in ((30e5, 0.0), (29e5, 0.001)):
        around, faults = replace(USUALLY, suction_pressure_pa=suction), Faults(present=(LEAK.fault(size),))
        quick = settler.settle(np.array([(suction - 30e5) / 1e5]), around, faults)
        slow.change(around=around, faults=faults)
        slow.hasten(100)
        long = slow.hasten(10)
        assert quick.export_dry_mol_s == pytest.approx(long.export_dry_mol_s, rel=3e-4)
        assert quick.indicated_power_w == pytest.approx(long.indicated_power_w, rel=3e-4)
        warm = quick.stages[0].discharge_temperature_k
        assert warm == pytest.approx(long.stages[0].discharge_temperature_k, abs=0.05)
    assert settler.turns < 2 * 60


@pytest.mark.parametrize(
    "load",
    [
        np.cos,
        lambda a: np.cos(a) - 0.4,
        lambda a: np.cos(a) + 0.3 * np.cos(3 * a + 1) - 0.1,
        lambda a: 2.0 + np.cos(a),
        lambda a: np.cos(2 * a) + 0.2,
    ],
)
def test_reversal_of_rows_is_that_of_each(load: Callable[[np.ndarray], np.ndarray]) -> None:
    angle = np.arange(200) * 2.0 * np.pi / 200
    rows = 1e5 * np.array([load(angle + shift) for shift in (0.0, 1.0, 3.0)])
    expected = [np.degrees(reversal(row).angle_rad) for row in rows]
    np.testing.assert_allclose(reversals(rows), expected, atol=1e-9)


@pytest.mark.slow
@pytest.mark.timeout(900)
def test_tables_meet_their_bars(tmp_path: Path) -> None:
    """Random points off the nodes, full load, two faults; the bench `tabulation` does all units."""
    unit = "K-110"
    assert CASES[unit][0][0] == "100"
    rows = compare(UNITS[unit], 0, 40, seed=2000, folder=tmp_path, kept=None)
    for bar, limit in BARS.items():
        assert max(row[bar] for row in rows) <= limit, bar
