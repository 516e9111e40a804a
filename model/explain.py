"""Working of any series of a unit: which sheet it stands on and which symbol it is."""

from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

import numpy as np

from model.corrections import Corrections
from model.errors import NotEvaluatedError
from model.evaluate import stage_inputs
from model.machine import Cylinder, Stage, Unit
from model.measured import Measured
from model.quantities import LOWER_LIMITS, QUANTITIES, Kind, Quantity, Scope, series_name, split_series
from model.stage import StageState, stage_frame
from model.steps import held_open
from model.surface import GasSurface
from model.verdicts import Verdict
from model.working import Sheet, Working, gas_functions, joined
from model.working_cylinder import LOADS, Set, crossings, geometry, peak, power, reversal_steps, tag

_CORRECTIONS: Final[Mapping[str, tuple[str, str]]] = MappingProxyType(
    {
        "f_pre": ("preheat", "share of the isentropic rise that the gas takes up on its way in"),
        "k_e": ("expansion_exponent", "exponent of the re-expansion / that of the gas"),
        "k_c": ("compression_exponent", "exponent of the compression / that of the gas"),
        "k_v": ("valve_loss", "flow resistance of the valves / that of their effective area"),
        "p0": ("valve_preload", "pressure difference that just lifts a plate / line pressure"),
        "p1": ("valve_full_lift", "pressure difference that lifts it fully / line pressure"),
        "os": ("opening_overshoot", "pressure past the line at opening / its estimate"),
        "wo": ("opening_decay", "how fast that dies away, in ln of volume"),
        "q_w": ("heat_loss", "share of the indicated power lost to the jacket"),
        "dve": ("volumetric_deficit", "volumetric efficiency lost to late closing and small leaks"),
    }
)
_FLOWS: Final[Mapping[str, tuple[str, str, str, str]]] = MappingProxyType(
    {
        "volumetric_efficiency": ("VE", "expected volumetric efficiency", "F / (Q * rho_s)", "1"),
        "measured_volumetric_efficiency": (
            "VE_m",
            "volumetric efficiency from measured flow",
            "flow * M / (Q * rho_s)",
            "1",
        ),
        "stage_capacity": ("C", "expected capacity", "F / M", "mol/s"),
    }
)
_NAG: Final = "P. K. Nag, Basic and Applied Thermodynamics, ch. 19, with the real entropy"


def working(unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, name: str) -> Working:
    """How one number of one frame came about.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    measured : Measured
        One frame. [SI]
    name : str
        Series name, e.g. ``stage1.stage_ratio``.

    Returns
    -------
    Working
        Givens and steps; the last step is the number that `model.evaluate` publishes.

    Raises
    ------
    KeyError
        The unit has no such series.
    NotEvaluatedError
        The frame gives no such number; its verdict says why.

    References
    ----------
    Each step names its own.
    """
    subject, quantity, _ = split_series(name)
    sheet = Sheet(functions=dict(gas_functions(gas)))
    builder = _Builder(unit=unit, gas=gas, corrections=corrections, measured=measured, sheet=sheet)
    return sheet.upto(builder.symbol(subject, quantity), name)


class _Builder:
    """Fills one sheet, each part once."""

    def __init__(
        self, *, unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, sheet: Sheet
    ) -> None:
        self._unit, self._gas, self._corrections = unit, gas, corrections
        self._measured, self._sheet = measured, sheet

    def symbol(self, subject: str, quantity: Quantity) -> str:
        if quantity.kind is Kind.MARGIN:
            return self._margin(subject, quantity)
        if quantity.key == "run_state":
            raise KeyError(quantity.key)  # a state of a table and no formula
        if quantity.kind is Kind.MEASURED:
            return self._measured_value(subject, quantity)
        if subject == "unit":
            return self._of_unit(quantity.key)
        for stage in self._unit.stages:
            if subject == stage.subject:
                return self._of_stage(stage, quantity.key)
            for cylinder in stage.cylinders:
                if subject == cylinder.subject:
                    return self._of_cylinder(stage, cylinder, quantity.key)
        raise KeyError(series_name(subject, quantity.key))

    def _of_unit(self, key: str) -> str:
        """Numbers of the whole unit start from those of its stages, which have a working of their own."""
        sheet, first = self._sheet, self._unit.stages[0]
        if key == "power":
            parts = []
            for stage in self._unit.stages:
                self._from_own_working(f"W_{stage.number}", stage, "stage_power", "W")
                parts.append(f"W_{stage.number}")
            sheet.step("W", "indicated power of all stages", joined(parts), "W", "sum")
            return "W"
        self._from_own_working("C_1", first, "stage_capacity", "mol/s")
        if key == "capacity":
            sheet.step("C", "expected capacity: that of the first stage", "C_1", "mol/s", "no side streams")
            return "C"
        if key == "mass_flow":
            sheet.given("M", "molar mass", self._gas.molar_mass_kg_mol, "kg/mol", "composition")
            sheet.step("F", "expected mass flow", "C_1 * M", "kg/s", "definition")
            return "F"
        if key == "capacity_residual":
            self._input("flow", "unit", "flow", "measured flow")
            sheet.step(
                "dC", "measured flow less expected, share of expected", "flow/C_1 - 1", "1", "definition"
            )
            return "dC"
        raise KeyError(series_name("unit", key))

    def _of_stage(self, stage: Stage, key: str) -> str:
        self._pressures(stage)
        if key == "stage_ratio":
            return "r"
        self._isentrope(stage)
        if key == "isentropic_discharge_temperature":
            return "T_2s"
        if QUANTITIES[key].scope is not Scope.STAGE:
            raise KeyError(series_name(stage.subject, key))
        at = self._stage(stage)
        if key in _FLOWS:
            return self._flow(key)
        self._work(stage, at)
        if key == "stage_power":
            return "W"
        return self._temperature(stage, key)

    def _flow(self, key: str) -> str:
        symbol, words, expression, unit = _FLOWS[key]
        if key == "measured_volumetric_efficiency":
            self._input("flow", "unit", "flow", "measured flow")
        self._sheet.step(symbol, words, expression, unit, "definition")
        return symbol

    def _temperature(self, stage: Stage, key: str) -> str:
        sheet = self._sheet
        sheet.step(
            "T_d", "expected discharge temperature", "T_of_h(h_s + W*(1 - q_w)/F, p_d)", "K",
            "first law for a steady open system",
        )  # fmt: skip
        if key == "expected_discharge_temperature":
            return "T_d"
        self._input("T_m", stage.subject, "discharge_temperature", "measured discharge temperature")
        sheet.step("dT", "measured less expected", "T_m - T_d", "K", "definition")
        return "dT"

    def _of_cylinder(self, stage: Stage, cylinder: Cylinder, key: str) -> str:
        self._pressures(stage)
        self._isentrope(stage)
        at = self._stage(stage)[cylinder.number]
        if key in LOADS:
            return peak(self._sheet, at, key)
        power(self._sheet, at)
        duration, magnitude = reversal_steps(self._sheet, at)
        if key == "reversal_crossings":
            return crossings(self._sheet, at)
        return duration if key == "reversal_degrees" else magnitude

    def _margin(self, subject: str, quantity: Quantity) -> str:
        key = quantity.key.removesuffix("_margin")
        limit = self._unit.limit(subject, key)
        if limit is None:
            raise NotEvaluatedError(Verdict.NO_LIMIT)
        value = self.symbol(subject, QUANTITIES[key])
        self._sheet.given(
            "limit", f"limit entered by {limit.entered_by}", limit.value, quantity.unit, limit.source
        )
        text = f"{value} - limit" if key in LOWER_LIMITS else f"limit - {value}"
        self._sheet.step("left", quantity.words, text, quantity.unit, "definition")
        return "left"

    def _measured_value(self, subject: str, quantity: Quantity) -> str:
        self._input("value", subject, quantity.key, quantity.words)
        self._sheet.step("reading", "as the plant gave it, in SI", "value", quantity.unit, "measured")
        return "reading"

    # -- what several of them share

    def _pressures(self, stage: Stage) -> None:
        sheet = self._sheet
        self._input("p_s", stage.subject, "suction_pressure", "suction pressure, absolute")
        self._input("p_d", stage.subject, "discharge_pressure", "discharge pressure, absolute")
        sheet.step("r", "pressure ratio", "p_d / p_s", "1", "definition")

    def _isentrope(self, stage: Stage) -> None:
        self._input("T_s", stage.subject, "suction_temperature", "suction temperature")
        self._sheet.step("s_s", "entropy at suction", "s(T_s, p_s)", "J/(kg K)", self._gas_source)
        self._sheet.step("T_2s", "isentropic discharge temperature", "T_of_s(s_s, p_d)", "K", _NAG)

    @property
    def _gas_source(self) -> str:
        return "surfaces of the multi-fluid Helmholtz equations"

    def _stage(self, stage: Stage) -> dict[int, Set]:
        """Everything up to the flow of a stage; what each of its cylinders hangs on."""
        sheet, unit = self._sheet, self._unit
        state = self._state(stage)
        frame, _ = stage_frame(unit, self._gas, self._corrections, state)
        for symbol, (name, words) in _CORRECTIONS.items():
            sheet.given(symbol, words, getattr(self._corrections, name), "1", "correction")
        self._speed()
        sheet.given("S", "stroke", unit.stroke_m, "m", "nameplate")
        sheet.given("L", "length of the connecting rod", unit.connecting_rod_m, "m", "nameplate")
        sheet.given("p_a", "atmosphere on the rod", unit.ambient_pressure_pa, "Pa", "site file")
        sheet.given("M", "molar mass", self._gas.molar_mass_kg_mol, "kg/mol", "composition")
        sheet.step("R", "crank radius", "S/2", "m", "geometry")
        sheet.step("lam", "crank radius / connecting rod", "R/L", "1", "geometry")
        source = self._gas_source
        sheet.step("rho_s", "density at suction", "rho(T_s, p_s)", "kg/m3", source)
        sheet.step("h_s", "enthalpy at suction", "h(T_s, p_s)", "J/kg", source)
        sheet.step("T_1", "gas in the cylinder at the end of suction", "T_s + f_pre*(T_2s - T_s)", "K")
        sheet.step("rho_1", "its density", "rho(T_1, p_s)", "kg/m3", source)
        sheet.step("T_2", "after compression without loss", "T_of_s(s(T_1, p_s), p_d)", "K", source)
        sheet.step("rho_2", "its density", "rho(T_2, p_d)", "kg/m3", source)
        sheet.step("n", "exponent of pressure against volume", "log(r) / log(rho_2/rho_1)", "1", "definition")
        found = {}
        step = unit.load_steps[int(state.load_step[0])]
        for cylinder in stage.cylinders:
            found[cylinder.number] = Set(
                unit=unit, cylinder=step.made_of(cylinder), frame=frame, corrections=self._corrections,
                held_open=held_open(unit, cylinder, state.load_step),
            )  # fmt: skip
            geometry(sheet, found[cylinder.number])
        ends = [tag(c, e.side) for c in stage.cylinders for e in c.ends]
        sheet.step("F", "mass flow of the stage", joined([f"F_{e}" for e in ends]), "kg/s", "sum")
        sheet.step("Q", "volume swept by loaded ends", joined([f"a_{e}*Q_{e}" for e in ends]), "m3/s", "sum")
        return found

    def _work(self, stage: Stage, at: dict[int, Set]) -> None:
        parts = [part for cylinder in stage.cylinders for part in power(self._sheet, at[cylinder.number])]
        self._sheet.step("W", "indicated power of the stage", joined(parts), "W", "sum")

    def _state(self, stage: Stage) -> StageState:
        inputs = stage_inputs(self._unit, stage, self._measured)
        if inputs.codes[0] != Verdict.GOOD:
            raise NotEvaluatedError(Verdict(int(inputs.codes[0])))
        return StageState(
            suction_pressure_pa=inputs.ps[:1], discharge_pressure_pa=inputs.pd[:1],
            suction_temperature_k=inputs.ts[:1], speed_rad_s=inputs.speed[:1],
            load_step=inputs.step[:1].astype(np.intp),
        )  # fmt: skip

    def _speed(self) -> None:
        assumed = "unit.speed" in self._measured.assumed
        value = float(self._measured.column("unit.speed")[0])
        self._sheet.given(
            "w", "speed of the crankshaft", value, "rad/s", "nameplate" if assumed else "measured"
        )

    def _input(self, symbol: str, subject: str, key: str, words: str) -> None:
        name = series_name(subject, key)
        value = float(self._measured.column(name)[0])
        if not np.isfinite(value):
            raise NotEvaluatedError(Verdict.INPUT_MISSING)
        self._sheet.given(symbol, words, value, QUANTITIES[key].unit, "measured", name)

    def _from_own_working(self, symbol: str, stage: Stage, key: str, unit: str) -> None:
        name = series_name(stage.subject, key)
        found = working(self._unit, self._gas, self._corrections, self._measured, name)
        self._sheet.given(
            symbol,
            f"{QUANTITIES[key].words} of stage {stage.number}",
            found.value,
            unit,
            f"working of {name}",
        )
