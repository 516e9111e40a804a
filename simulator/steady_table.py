"""Steady tables of the three invented machines: the inside of the plant, for now.

This is a table with straight lines between its nodes, not crank-angle physics; it answers what the tags of a
machine show once everything has come to rest. Crank-angle equations will replace it behind the same doors,
`MACHINES` and `Machine.tags`. It knows nothing of the model's formulas and imports none of them.

Source of the nodes marked *given*: the project's earlier first-principles study of these invented
machines (a crank-angle code with its own gas law). That is another code's output, so agreement with it is
verification, not validation. All other numbers are this file's own estimates and say how they were found.

K-110: straight lines over the logarithm of the pressure ratio through two given nodes (30 and 24 bar(a) in
the suction header), running on beyond them: volumetric efficiency, temperature exponent and specific work.
The given nodes are for a 57 mm rod; the machine has a 63 mm rod: flow and power shrink with the swept volume.
K-220 and K-330: one node per load step; pressures follow small header swings by fixed exponents. The head-end
pockets of K-330 are not on its nameplate yet and not in its table.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final, Protocol

BAR: Final = 1e5
RPM: Final = math.pi / 30
AMBIENT_K: Final = 293.15
MOTOR_AND_DRIVE: Final = 0.94  # indicated power / electrical power, own estimate


@dataclass(frozen=True, slots=True, kw_only=True)
class Conditions:
    """What surrounds a machine and how it is driven."""

    suction_header_pa: float
    discharge_header_pa: float
    suction_temperature_k: float
    load_step: str  # word of the plant
    speed_rad_s: float
    running: bool = True


class UnknownStepError(ValueError):
    """The table has no node for a load-step word."""

    def __init__(self, word: str, known: tuple[str, ...]) -> None:
        self.word = word
        super().__init__(f"load step {word!r} is not in the plant's table; known: {', '.join(known)}")


class Machine(Protocol):
    """The face of a machine."""

    @property
    def steps(self) -> tuple[str, ...]:
        """Load-step words it knows."""

    @property
    def rated(self) -> Conditions:
        """Where it usually runs."""

    def tags(self, at: Conditions) -> Mapping[str, float]:
        """Steady values by series name (SI, absolute); the load-step word is not among them."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """A straight line through two nodes, running on beyond them."""

    x: tuple[float, float]
    y: tuple[float, float]

    def __call__(self, x: float) -> float:
        share = (x - self.x[0]) / (self.x[1] - self.x[0])
        return self.y[0] + share * (self.y[1] - self.y[0])


@dataclass(frozen=True, slots=True, kw_only=True)
class _BoosterStep:
    """What a load step changes against full load, at the same pressure ratio."""

    flow: float
    specific_work: float
    temperature_rise: float


class Booster:
    """K-110: natural gas, one stage, two throws, variable speed."""

    _SPEED = 900 * RPM
    _SUCTION_K = 303.0
    _MOLAR_MASS = 0.017975  # kg/mol, hand, from the composition in the site file
    # given, at 900 rpm and full load
    _HEADERS = (30 * BAR, 70 * BAR)
    _BOTTLES = (29.81 * BAR, 70.46 * BAR)
    _FLOW = 4.53  # kg/s
    _LN_RATIO = (math.log(2.363), math.log(2.95))  # at 30 and 24 bar in the header
    _VE = (0.837, 0.773)
    _DISCHARGE_K = (374.3, 391.5)
    _POWER = (628e3, 588e3)
    _SPEED_EXPONENT = math.log(477 / 628) / math.log(700 / 900)  # given: 477 kW at 700 rpm
    # Compressibility at 303 K: 1 at no pressure; this slope gives the 2.265 kg/s per throw of the first node.
    _Z_SLOPE = 0.0563 / 29.81 / BAR  # 1/Pa
    # Swept volume with the 63 mm rod against the 57 mm rod of the given nodes: both ends, crank end.
    _ROD = MappingProxyType({"100": 0.9901, "50": 0.9793})  # hand
    # given, head ends held open at 30 bar: 2.10 kg/s, 313 kW, 378 K
    _HALF = (2.10, 313e3, 378.0)

    def __init__(self) -> None:
        flow_24 = (
            self._FLOW * self._VE[1] / self._VE[0] * self._density(0.8 * self._BOTTLES[0]) / self._density()
        )
        work = (self._POWER[0] / self._FLOW, self._POWER[1] / flow_24)  # J/kg
        x = self._LN_RATIO
        self._ve = Line(x=x, y=self._VE)
        self._work_per_ln = Line(x=x, y=(work[0] / x[0], work[1] / x[1]))
        exponents = [math.log(td / self._SUCTION_K) / ln for td, ln in zip(self._DISCHARGE_K, x, strict=True)]
        self._exponent = Line(x=x, y=(exponents[0], exponents[1]))
        self._by_step = {"100": _BoosterStep(flow=1.0, specific_work=1.0, temperature_rise=1.0)}
        self._by_step["50"] = self._half_step()

    @property
    def steps(self) -> tuple[str, ...]:
        return tuple(self._by_step)

    @property
    def rated(self) -> Conditions:
        return Conditions(
            suction_header_pa=self._HEADERS[0],
            discharge_header_pa=self._HEADERS[1],
            suction_temperature_k=self._SUCTION_K,
            load_step="100",
            speed_rad_s=self._SPEED,
        )

    def tags(self, at: Conditions) -> Mapping[str, float]:
        if at.load_step not in self._by_step:
            raise UnknownStepError(at.load_step, self.steps)
        if not at.running or at.speed_rad_s <= 0:
            return _standing(at, stages=1)
        step = self._by_step[at.load_step]
        suction, discharge, flow = self._bottles(at, step)
        speed = at.speed_rad_s / self._SPEED
        x = math.log(discharge / suction)
        work = self._work_per_ln(x) * x * step.specific_work * speed ** (self._SPEED_EXPONENT - 1)
        rise = at.suction_temperature_k * (math.exp(self._exponent(x) * x) - 1) * step.temperature_rise
        rod = self._ROD[at.load_step]
        return {
            "stage1.suction_pressure": suction,
            "stage1.discharge_pressure": discharge,
            "stage1.suction_temperature": at.suction_temperature_k,
            # the work beyond the table's speed goes into the gas
            "stage1.discharge_temperature": at.suction_temperature_k
            + rise * speed ** (self._SPEED_EXPONENT - 1),
            "unit.speed": at.speed_rad_s,
            "unit.flow": flow * rod / self._MOLAR_MASS,
            "unit.electrical_power": flow * rod * work / MOTOR_AND_DRIVE,
            "unit.run_signal": 1.0,
        }

    def _bottles(self, at: Conditions, step: _BoosterStep) -> tuple[float, float, float]:
        """Pressures at the bottles and the flow: line losses grow with the square of the flow."""
        loss = (1 - self._BOTTLES[0] / self._HEADERS[0], self._BOTTLES[1] / self._HEADERS[1] - 1)
        flow = self._FLOW
        for _ in range(4):  # losses are under 1 %, so this settles to seven digits
            share = (flow / self._FLOW) ** 2
            suction = at.suction_header_pa * (
                1 - loss[0] * share * (self._HEADERS[0] / at.suction_header_pa) ** 2
            )
            discharge = at.discharge_header_pa * (1 + loss[1] * share)
            ve = max(0.0, self._ve(math.log(discharge / suction)))
            warm = self._SUCTION_K / at.suction_temperature_k
            dense = self._density(suction) / self._density() * warm
            flow = self._FLOW * step.flow * at.speed_rad_s / self._SPEED * ve / self._VE[0] * dense
        return suction, discharge, flow

    def _half_step(self) -> _BoosterStep:
        flow, power, discharge_k = self._HALF
        plain = _BoosterStep(flow=flow / self._FLOW, specific_work=1.0, temperature_rise=1.0)
        suction, discharge, guess = self._bottles(self.rated, plain)
        x = math.log(discharge / suction)
        rise = self._SUCTION_K * (math.exp(self._exponent(x) * x) - 1)
        return _BoosterStep(
            flow=plain.flow * flow / guess,
            specific_work=power / flow / (self._work_per_ln(x) * x),
            temperature_rise=(discharge_k - self._SUCTION_K) / rise,
        )

    def _density(self, pressure_pa: float | None = None) -> float:
        """Density but for a constant factor; without a pressure that of the first given point."""
        p = self._BOTTLES[0] if pressure_pa is None else pressure_pa
        return p / (1 - self._Z_SLOPE * p)


@dataclass(frozen=True, slots=True, kw_only=True)
class TrainNode:
    """One load step of a train with rated pressures in the headers; one number per stage."""

    suction_bar: tuple[float, ...]
    discharge_bar: tuple[float, ...]
    discharge_k: tuple[float, ...]
    flow_kg_s: float
    power_w: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Train:
    """A machine of several stages in a row."""

    headers_pa: tuple[float, float]
    suction_k: tuple[float, ...]
    molar_mass: float  # kg/mol
    speed_rad_s: float  # at which the nodes hold
    # How pressures answer header swings. Rows: suction of each stage; columns: suction, discharge header.
    follow: tuple[tuple[float, float], ...]
    nodes: Mapping[str, TrainNode]
    slip_per_w: float = 0.0  # of an induction motor: how far it falls behind for each watt it draws

    @property
    def steps(self) -> tuple[str, ...]:
        return tuple(self.nodes)

    @property
    def rated(self) -> Conditions:
        return Conditions(
            suction_header_pa=self.headers_pa[0],
            discharge_header_pa=self.headers_pa[1],
            suction_temperature_k=self.suction_k[0],
            load_step=next(iter(self.nodes)),
            speed_rad_s=self.speed_rad_s,
        )

    def tags(self, at: Conditions) -> Mapping[str, float]:
        node = self.nodes.get(at.load_step)
        if node is None:
            raise UnknownStepError(at.load_step, self.steps)
        if not at.running or at.speed_rad_s <= 0:
            return _standing(at, stages=len(self.suction_k))
        swing = (at.suction_header_pa / self.headers_pa[0], at.discharge_header_pa / self.headers_pa[1])
        factors = [swing[0] ** s * swing[1] ** d for s, d in self.follow]
        outlet_factors = [*factors[1:], swing[1]]
        power = node.power_w * factors[1] * at.speed_rad_s / self.speed_rad_s / MOTOR_AND_DRIVE
        behind = 1 - self.slip_per_w * power
        speed = at.speed_rad_s / self.speed_rad_s * behind
        flow = node.flow_kg_s * factors[0] * speed * self.suction_k[0] / at.suction_temperature_k
        values: dict[str, float] = {}
        for i, cooled_k in enumerate(self.suction_k):
            stage = f"stage{i + 1}"
            inlet_k = at.suction_temperature_k if i == 0 else cooled_k
            suction = node.suction_bar[i] * BAR * factors[i]
            discharge = node.discharge_bar[i] * BAR * outlet_factors[i]
            node_ln = math.log(node.discharge_bar[i] / node.suction_bar[i])
            exponent = math.log(node.discharge_k[i] / cooled_k) / node_ln
            values[f"{stage}.suction_pressure"] = suction
            values[f"{stage}.discharge_pressure"] = discharge
            values[f"{stage}.suction_temperature"] = inlet_k
            values[f"{stage}.discharge_temperature"] = inlet_k * (discharge / suction) ** exponent
        return values | {
            "unit.speed": at.speed_rad_s * behind,
            "unit.flow": flow / self.molar_mass,
            "unit.electrical_power": power * behind,
            "unit.run_signal": 1.0,
        }


# Hydrogen-rich gas, three stages, four throws, synchronous motor.
K220: Final = Train(
    headers_pa=(18 * BAR, 140 * BAR),
    suction_k=(308.0, 309.0, 308.0),  # given
    molar_mass=0.003889,  # hand, from the composition in the site file
    speed_rad_s=375 * RPM,
    # By hand: three stages in a row whose volumetric efficiency falls by .19 % for each 1 % of ratio.
    follow=((1.0, 0.0), (0.98, 0.02), (0.84, 0.16)),
    nodes=MappingProxyType(
        {
            # given, whole row
            "100": TrainNode(
                suction_bar=(17.88, 37.57, 75.41),
                discharge_bar=(37.78, 75.99, 141.18),
                discharge_k=(381.4, 377.4, 370.5),
                flow_kg_s=1.479,
                power_w=2415e3,
            ),
            # given: power and the ratios 2.08, 2.07, 1.82. Line losses a quarter of full load; temperatures
            # by the exponents of full load plus 1.5 K of idle-end heating; flow by the share of crank ends.
            "50-head-open": TrainNode(
                suction_bar=(17.97, 37.33, 77.12),
                discharge_bar=(37.38, 77.27, 140.30),
                discharge_k=(381.2, 381.4, 368.9),
                flow_kg_s=0.70,
                power_w=1163e3,
            ),
            # given: power. Pressures between stages as in `follow`, with the swept shares of the head ends
            # (stage 3 has the largest, so it draws its suction down); temperatures and flow as above.
            "50-crank-open": TrainNode(
                suction_bar=(17.97, 36.86, 71.30),
                discharge_bar=(36.91, 71.44, 140.30),
                discharge_k=(379.8, 374.4, 377.5),
                flow_kg_s=0.77,
                power_w=1284e3,
            ),
        }
    ),
)

# Natural gas, two stages, four throws, induction motor: 750 rpm without load.
K330: Final = Train(
    headers_pa=(5 * BAR, 34 * BAR),
    suction_k=(300.0, 308.0),  # given
    molar_mass=0.017975,  # hand, the composition is that of K-110
    speed_rad_s=750 * RPM,
    slip_per_w=0.013 / 1250e3,  # own estimate: 1.3 % at the rated 1250 kW
    # By hand: two stages whose volumetric efficiency falls by .29 and .35 % for each 1 % of ratio.
    follow=((1.0, 0.0), (0.79, 0.21)),
    nodes=MappingProxyType(
        {
            # given, whole row
            "100": TrainNode(
                suction_bar=(4.97, 12.39),
                discharge_bar=(12.45, 34.18),
                discharge_k=(370.7, 389.2),
                flow_kg_s=3.084,
                power_w=989e3,
            ),
            # given: flow, head ends held open. Line losses a quarter of full load; the crank ends of stage 2
            # sweep the smaller share, so the pressure between the stages rises by 1.1 %; temperatures by the
            # exponents of full load plus 1.5 K of idle-end heating; power by the flow plus 4 %, which lies
            # between what the half steps of the two other machines take.
            "50": TrainNode(
                suction_bar=(4.9925, 12.545),
                discharge_bar=(12.56, 34.045),
                discharge_k=(372.6, 389.2),
                flow_kg_s=1.48,
                power_w=494e3,
            ),
        }
    ),
)


def _standing(at: Conditions, stages: int) -> Mapping[str, float]:
    """A machine that stands: bypass open, check valve shut, so every stage settles at the suction header."""
    values: dict[str, float] = {}
    for i in range(1, stages + 1):
        values[f"stage{i}.suction_pressure"] = at.suction_header_pa
        values[f"stage{i}.discharge_pressure"] = at.suction_header_pa
        values[f"stage{i}.suction_temperature"] = AMBIENT_K
        values[f"stage{i}.discharge_temperature"] = AMBIENT_K
    return values | {
        "unit.speed": 0.0,
        "unit.flow": 0.0,
        "unit.electrical_power": 0.0,
        "unit.run_signal": 0.0,
    }


MACHINES: Final[Mapping[str, Machine]] = MappingProxyType({"K-110": Booster(), "K-220": K220, "K-330": K330})
