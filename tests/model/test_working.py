"""The working that is shown leads to the number that is published, by an evaluator of the test's own."""

import re
from collections.abc import Callable, Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from agent.siteplan.load import load_site
from agent.siteplan.plan import UnitPlan
from model.corrections import Corrections
from model.errors import NotEvaluatedError
from model.evaluate import Measured, evaluate
from model.explain import working
from model.expression import ExpressionError, calls, evaluate_expression, symbols
from model.gas import build_surface
from model.quantities import QUANTITIES, split_series
from model.surface import GasSurface
from model.verdicts import Verdict
from model.working import OURS, Sheet, Working

SITE = load_site(Path(str(files("simulator") / "sites" / "ostmere.yaml")))
BAR = 1e5
# bar(a) and K around each stage; any plausible state will do here
STATES: Mapping[str, tuple[tuple[float, float, float, float], ...]] = {
    "K-110": ((29.8, 70.6, 303.0, 375.0),),
    "K-220": ((17.9, 37.7, 308.0, 380.0), (37.5, 76.0, 309.0, 377.0), (75.4, 141.3, 308.0, 371.0)),
    "K-330": ((4.97, 12.5, 300.0, 371.0), (12.4, 34.3, 308.0, 390.0)),
}
SURFACES: dict[str, GasSurface] = {}


def gas_of(plan: UnitPlan) -> GasSurface:
    if plan.id not in SURFACES:
        SURFACES[plan.id] = build_surface(plan.unit.composition, plan.unit.domain)
    return SURFACES[plan.id]


def frame(plan: UnitPlan, step: int) -> Measured:
    values = {
        "unit.speed": 0.998 * plan.unit.rated_speed_rad_s, "unit.flow": 200.0,
        "unit.electrical_power": 1e6, "unit.load_step": float(step), "unit.run_signal": 1.0,
    }  # fmt: skip
    for stage, (ps, pd, ts, td) in zip(plan.unit.stages, STATES[plan.id], strict=True):
        values |= {
            f"{stage.subject}.suction_pressure": ps * BAR, f"{stage.subject}.discharge_pressure": pd * BAR,
            f"{stage.subject}.suction_temperature": ts, f"{stage.subject}.discharge_temperature": td,
        }  # fmt: skip
    names = plan.input_names()
    return Measured.from_inputs(plan.unit, names, [[values[n] for n in names]])


# --- an evaluator of the test's own: a few lines of recursive descent, nothing shared with the product

TOKEN = re.compile(r"\s*(\*\*|[-+*/(),]|[A-Za-z_]\w*|\d+\.?\d*(?:[eE][-+]?\d+)?)")


class Reader:
    def __init__(
        self, text: str, values: Mapping[str, Any], functions: Mapping[str, Callable[..., Any]]
    ) -> None:
        self.tokens, self.place = TOKEN.findall(text), 0
        assert "".join(self.tokens) == re.sub(r"\s", "", text)
        self.values, self.functions = values, functions

    def next(self) -> str:
        self.place += 1
        return str(self.tokens[self.place - 1])

    def peek(self) -> str:
        return str(self.tokens[self.place]) if self.place < len(self.tokens) else ""

    def sum(self) -> Any:
        total = self.product()
        while self.peek() in {"+", "-"}:
            total = total + self.product() if self.next() == "+" else total - self.product()
        return total

    def product(self) -> Any:
        total = self.signed()
        while self.peek() in {"*", "/"}:
            total = total * self.signed() if self.next() == "*" else total / self.signed()
        return total

    def signed(self) -> Any:
        if self.peek() == "-":
            self.next()
            return -self.signed()
        base = self.atom()
        if self.peek() == "**":
            self.next()
            return base ** self.signed()
        return base

    def atom(self) -> Any:
        token = self.next()
        if token == "(":
            inside = self.sum()
            assert self.next() == ")"
            return inside
        if self.peek() == "(":
            self.next()
            arguments = [self.sum()]
            while self.next() == ",":
                arguments.append(self.sum())
            return self.functions[token](*arguments)
        if token == "pi":
            return np.pi
        return self.values[token] if token in self.values else float(token)


def plate(full_lift_loss: Any, line: Any, p0: float, p1: float) -> Any:
    """Balance of plate and springs by bisection on the lift; the taper as it is described."""
    x = np.atleast_1d(np.asarray(full_lift_loss, float)) / (p1 * line)
    low, high = np.zeros_like(x), np.ones_like(x)
    for _ in range(60):
        y = (low + high) / 2
        under = y**2 * (p0 / p1 + (1 - p0 / p1) * y) < x
        low, high = np.where(under, y, low), np.where(under, high, y)
    held = line * (p0 * np.minimum(1.0, 50 * x) + (p1 - p0) * (low + high) / 2)
    return np.where(x >= 1, x * p1 * line, held).reshape(np.shape(full_lift_loss))


def reversal_angle(load: Any, tension: float, compression: float) -> float:
    """Walks round the turn; runs of each sign end where straight lines cross the dead load."""
    count, dead = len(load), 0.002 * max(tension, compression)

    def runs(g: Any) -> list[float]:
        if np.all(g > 0):
            return [float(count)]
        start = int(np.argmax(g <= 0))
        found, length = [], 0.0
        for i in range(start, start + count):
            a, b = g[i % count], g[(i + 1) % count]
            if a > 0 and b > 0:
                length += 1
            elif a <= 0 < b:
                length = b / (b - a)
            elif a > 0 >= b:
                found.append(length + a / (a - b))
        return found

    pulled, pushed = runs(np.asarray(load) - dead), runs(-np.asarray(load) - dead)
    if not pulled or not pushed:
        return 0.0
    minor = pulled if sum(pulled) < sum(pushed) else pushed
    return max(minor) * 2 * np.pi / count


def reversal_crossings(load: Any, tension: float, compression: float) -> float:
    """Walks round the turn and counts how often pull follows on push or push on pull."""
    dead = 0.002 * max(tension, compression)
    signs = [1 if value > dead else -1 for value in load if abs(value) > dead]
    return float(sum(a != b for a, b in zip(signs, signs[1:] + signs[:1], strict=True)))


def own_functions(gas: GasSurface) -> Mapping[str, Callable[..., Any]]:
    plain: dict[str, Callable[..., Any]] = {
        "exp": np.exp, "log": np.log, "sqrt": np.sqrt, "sin": np.sin, "cos": np.cos, "acos": np.arccos,
        "abs": np.abs, "max": np.maximum, "min": np.minimum, "sum": np.sum, "where": np.where,
        "plate": plate, "reversal_angle": reversal_angle, "reversal_crossings": reversal_crossings,
        "below": lambda a, b: a < b,
    }  # fmt: skip
    look_ups: dict[str, Callable[..., Any]] = {
        "rho": gas.density, "h": gas.enthalpy, "s": gas.entropy, "T_of_s": gas.temperature_from_entropy,
        "T_of_h": gas.temperature_from_enthalpy,
    }  # fmt: skip
    return plain | look_ups


def recomputed(found: Working, gas: GasSurface) -> float:
    """The last step, each step from the givens listed and from steps before it."""
    values: dict[str, Any] = {g.symbol: g.value for g in found.givens}
    functions = own_functions(gas)
    for step in found.steps:
        assert set(step.needs) <= values.keys(), f"{step.symbol} uses what is not listed before it"
        values[step.symbol] = Reader(step.expression, values, functions).sum()
        np.testing.assert_allclose(
            values[step.symbol], step.value, rtol=1e-5, atol=1e-9 + 1e-6 * np.max(np.abs(step.value))
        )
    return float(values[found.steps[-1].symbol])


QUICK = {("K-110", 0), ("K-220", 1)}  # both gases, one and three stages, loaded and held open
EVERY = [
    pytest.param(
        plan, step, id=f"{plan.id}-{step}", marks=[] if (plan.id, step) in QUICK else pytest.mark.slow
    )
    for plan in SITE.units
    for step in range(len(plan.unit.load_steps))
]


@pytest.mark.parametrize(("plan", "step"), EVERY)
def test_every_number_follows_from_its_working(plan: UnitPlan, step: int) -> None:
    gas, measured = gas_of(plan), frame(plan, step)
    published = evaluate(plan.unit, gas, Corrections.nominal(), measured)
    for name, column in published.columns.items():
        if column.verdicts[0] != Verdict.GOOD:
            with pytest.raises(NotEvaluatedError):
                working(plan.unit, gas, Corrections.nominal(), measured, name)
            continue
        found = working(plan.unit, gas, Corrections.nominal(), measured, name)
        value = column.values[0]
        assert recomputed(found, gas) == pytest.approx(value, rel=1e-6, abs=1e-9), name
    for name in plan.input_names():
        found = working(plan.unit, gas, Corrections.nominal(), measured, name)
        assert recomputed(found, gas) == measured.column(name)[0]


def test_every_quantity_of_the_glossary_has_a_working() -> None:
    """The cases above try each of these names; the running state is a state and no number."""
    names = [n for plan in SITE.units for n in (*plan.input_names(), *plan.result_names())]
    assert QUANTITIES.keys() - {split_series(n)[1].key for n in names} == set()
    for plan in SITE.units:
        tried = set(evaluate(plan.unit, gas_of(plan), Corrections.nominal(), frame(plan, 0)).columns)
        plain = {n for n in plan.result_names() if n.split(".")[-1] not in {"u", "p"}}
        assert plain - tried == {"unit.run_state"}


def test_a_wrong_number_in_the_working_is_seen() -> None:
    plan = SITE.units[0]
    gas, measured = gas_of(plan), frame(plan, 0)
    found = working(plan.unit, gas, Corrections.nominal(), measured, "stage1.expected_discharge_temperature")
    for given in found.givens:
        if given.value.ndim or given.value == 0.0:
            continue
        values: dict[str, Any] = {g.symbol: g.value for g in found.givens}
        values[given.symbol] = given.value * 1.01
        for step in found.steps:
            values[step.symbol] = Reader(step.expression, values, own_functions(gas)).sum()
        # steps of a turn and the two exponents cancel or hardly show; all others must move the result
        moved = abs(float(values[found.steps[-1].symbol]) / float(found.value) - 1)
        assert moved > 1e-9 or given.symbol.startswith(("N_", "t_")), given.symbol


def test_every_step_names_its_source_its_unit_and_its_words() -> None:
    plan = SITE.units[1]
    gas, measured = gas_of(plan), frame(plan, 1)
    for name in ("cylinder4.reversal_degrees", "stage2.discharge_temperature_margin", "unit.power"):
        found = working(plan.unit, gas, Corrections.nominal(), measured, name)
        for line in (*found.givens, *found.steps):
            assert line.words
            assert line.unit
        assert all(step.source for step in found.steps)
        assert all(given.origin for given in found.givens)
        assert set(found.functions) == {c for s in found.steps for c in calls(s.expression)}
    assert OURS == "ours"


def test_what_is_missing_or_unknown_is_said() -> None:
    plan = SITE.units[0]
    gas, measured = gas_of(plan), frame(plan, 0)
    values = measured.values.copy()
    values[0, list(measured.names).index("stage1.suction_pressure")] = np.nan
    blind = Measured(names=measured.names, values=values, assumed=measured.assumed)
    with pytest.raises(NotEvaluatedError):
        working(plan.unit, gas, Corrections.nominal(), blind, "stage1.stage_ratio")
    with pytest.raises(NotEvaluatedError):
        working(plan.unit, gas, Corrections.nominal(), blind, "cylinder1.pin_load_tension")
    for unknown in ("stage9.stage_ratio", "stage1.beauty", "unit.stage_ratio"):
        with pytest.raises(KeyError):
            working(plan.unit, gas, Corrections.nominal(), measured, unknown)


@pytest.mark.parametrize(
    "text", ["a.b", "a[0]", "__import__('os')", "a if b else c", "lambda: 1", "1 +", "a @ b", "f'x'", "'x'"]
)
def test_an_expression_is_arithmetic_and_nothing_else(text: str) -> None:
    with pytest.raises(ExpressionError):
        evaluate_expression(text, {"a": np.float64(1), "b": np.float64(2), "c": np.float64(3)}, {})


def test_symbols_and_calls_of_an_expression() -> None:
    assert symbols("b * log(a/b) + 2*pi*a") == ("b", "a")
    assert calls("b * log(a/b) + exp(1)") == ("log", "exp")
    assert evaluate_expression("-2**2 + max(a, 3)", {"a": np.float64(1)}, {}) == -1.0


def test_a_symbol_stands_once() -> None:
    sheet = Sheet()
    sheet.given("a", "a number", 1.0, "1", "constant")
    with pytest.raises(ValueError, match="twice"):
        sheet.given("a", "another", 2.0, "1", "constant")
