"""Over what a table holds: boundary inputs that vary, each with its range, and faults with their sizes."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import Final

import numpy as np

from model.machine import Side
from simulator.equipment import Surroundings
from simulator.faults import Fault, FaultKind, Faults
from simulator.gas_data import Floats

# Field of Surroundings -> step to which a range is rounded outward, and whether it counts by its logarithm.
VARIABLES: Final[Mapping[str, tuple[float, bool]]] = MappingProxyType(
    {
        "suction_pressure_pa": (0.02, True),
        "discharge_pressure_pa": (0.02, True),
        "speed_rad_s": (0.02, True),
        "suction_temperature_k": (2.0, False),
        "cooling_water_k": (2.0, False),
        "jacket_water_k": (2.0, False),
        "saturation": (0.05, False),
        "first_recycle": (0.005, False),
        "final_recycle": (0.005, False),
    }
)
_LEAST_WIDTH: Final = 1e-9
_GAS: Final = "gas"  # axes of composition, numbered
_FAULT_STEP: Final = 1.15  # sizes are rounded up to a power of this


class OutsideTableError(ValueError):
    """A table is asked for what it was not made for."""

    def __init__(self, unit: str, name: str, value: float, low: float, high: float) -> None:
        self.name, self.value, self.low, self.high = name, value, low, high
        super().__init__(f"{unit}: {name} {value:g} is outside the table's {low:g} to {high:g}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Axis:
    """One boundary input that varies."""

    name: str
    low: float
    high: float
    logarithmic: bool = False

    def scaled(self, value: Floats) -> Floats:
        """Values as -1 to 1."""
        x, low, high = (np.log(v) if self.logarithmic else v for v in (value, self.low, self.high))
        return np.asarray(2.0 * (x - low) / (high - low) - 1.0)

    def value(self, scaled: float) -> float:
        share = 0.5 * (scaled + 1.0)
        if self.logarithmic:
            return float(self.low * (self.high / self.low) ** share)
        return self.low + share * (self.high - self.low)


@dataclass(frozen=True, slots=True, kw_only=True)
class Spot:
    """A kind of fault at a place, of any size."""

    kind: FaultKind
    stage: int | None = None
    cylinder: int | None = None
    side: Side | None = None

    def fault(self, size: float) -> Fault:
        return Fault(kind=self.kind, size=size, stage=self.stage, cylinder=self.cylinder, side=self.side)

    @property
    def words(self) -> str:
        place = [f"stage {self.stage}"] * (self.stage is not None)
        place += [f"cylinder {self.cylinder}"] * (self.cylinder is not None)
        place += [str(self.side)] * (self.side is not None)
        return " ".join([str(self.kind), *place])


@dataclass(frozen=True, slots=True, kw_only=True)
class Domain:
    """What may vary about one unit at one load step.

    ``usual`` holds all that does not vary; ``fixed`` are faults that are there all the time.
    """

    usual: Surroundings
    axes: tuple[Axis, ...]
    gas: tuple[Mapping[str, float], ...] = ()  # what one unit of each gas axis adds to the composition
    fixed: tuple[Fault, ...] = field(default=())

    def surroundings(self, point: Floats) -> Surroundings:
        """The boundary at a point of the cube from -1 to 1."""
        values = {axis.name: axis.value(float(x)) for axis, x in zip(self.axes, point, strict=True)}
        around = self.usual
        if self.gas and around.composition is not None:
            mixed = dict(around.composition)
            for number, direction in enumerate(self.gas):
                share = values.pop(f"{_GAS}{number}", 0.0)
                for name, slope in direction.items():
                    mixed[name] = mixed.get(name, 0.0) + share * slope
            around = replace(around, composition={n: max(0.0, y) for n, y in mixed.items()})
        return replace(around, **values)  # type: ignore[arg-type]

    def faults(self, spots: Sequence[Spot], sizes: Sequence[float]) -> Faults:
        present = (s.fault(size) for s, size in zip(spots, sizes, strict=True) if size > 0.0)
        return Faults(present=(*self.fixed, *present))

    def points(self, unit: str, values: Mapping[str, Floats]) -> Floats:
        """Places in the cube, (n, axes).

        Raises
        ------
        OutsideTableError
            A value lies outside its axis.
        """
        columns = []
        for axis in self.axes:
            value = np.asarray(values[axis.name], dtype=float)
            for worst in (float(value.min()), float(value.max())):
                if not axis.low - 1e-9 * abs(axis.low) <= worst <= axis.high + 1e-9 * abs(axis.high):
                    raise OutsideTableError(unit, axis.name, worst, axis.low, axis.high)
            columns.append(axis.scaled(value))
        return np.column_stack(columns)


def domain_of(
    usual: Surroundings,
    values: Mapping[str, Floats],
    composition: tuple[tuple[str, ...], Floats] | None = None,
    *,
    margin: float = 0.03,
    fixed: tuple[Fault, ...] = (),
) -> Domain:
    """The smallest domain that holds all visited values, with a margin, rounded outward.

    Parameters
    ----------
    usual : Surroundings
        What holds of all that is not among the values.
    values : Mapping[str, Floats]
        Visited values of fields of `Surroundings`, SI, (n,) each.
    composition : tuple of names and Floats, optional
        Visited dry compositions, (n, names).
    margin : float
        Added at both ends, share of the range [-].
    fixed : tuple of Fault
        Faults that are there all the time.
    """
    axes, constant = [], {}
    for name, (step, logarithmic) in VARIABLES.items():
        visited = np.asarray(values.get(name, getattr(usual, name)), dtype=float)
        low, high = float(visited.min()), float(visited.max())
        if high - low <= _LEAST_WIDTH * max(1.0, abs(high)):
            constant[name] = low
        else:
            axes.append(_axis(name, low, high, margin=margin, step=step, logarithmic=logarithmic))
    around = replace(usual, **constant)  # type: ignore[arg-type]
    gas: tuple[Mapping[str, float], ...] = ()
    if composition is not None:
        around, gas, more = _gas_axes(around, *composition, margin=margin)
        axes += more
    return Domain(usual=around, axes=tuple(axes), gas=gas, fixed=fixed)


def gas_shares(domain: Domain, names: Sequence[str], composition: Floats) -> dict[str, Floats]:
    """Where compositions lie on the gas axes."""
    if not domain.gas or domain.usual.composition is None:
        return {}
    centre = np.array([domain.usual.composition.get(n, 0.0) for n in names])
    directions = np.array([[d.get(n, 0.0) for n in names] for d in domain.gas])
    inverse = np.linalg.pinv(directions)
    shares = np.asarray((composition - centre) @ inverse)
    return {f"{_GAS}{k}": shares[:, k] for k in range(len(directions))}


def rounded_up(size: float, largest: float) -> float:
    """A fault's largest size, a little larger, so that stories alike share their tables."""
    return float(min(largest, _FAULT_STEP ** np.ceil(np.log(size) / np.log(_FAULT_STEP) - 1e-9)))


def _axis(name: str, low: float, high: float, *, margin: float, step: float, logarithmic: bool) -> Axis:
    if logarithmic:
        low, high = float(np.log(low)), float(np.log(high))
    spare = margin * (high - low)
    bottom, top = np.floor((low - spare) / step) * step, np.ceil((high + spare) / step) * step
    if logarithmic:
        return Axis(name=name, low=float(np.exp(bottom)), high=float(np.exp(top)), logarithmic=True)
    if low >= 0.0:
        bottom = max(0.0, bottom)
    if name == "saturation":
        top = min(1.0, top)
    return Axis(name=name, low=float(bottom), high=float(top))


def _gas_axes(
    around: Surroundings, names: tuple[str, ...], composition: Floats, *, margin: float
) -> tuple[Surroundings, tuple[Mapping[str, float], ...], list[Axis]]:
    """As many directions as the visited compositions spread in."""
    corners = np.unique(np.round(composition, 9), axis=0)
    centre = corners.mean(axis=0)
    _, spread, ways = np.linalg.svd(corners - centre, full_matrices=False)
    kept = ways[spread > 1e-6 * np.sqrt(len(corners))]
    mean = dict(zip(names, (float(y) for y in centre), strict=True))
    axes, gas = [], []
    for number, way in enumerate(kept):
        along = (corners - centre) @ way
        half = (1.0 + 2.0 * margin) * float(np.abs(along).max())
        gas.append(dict(zip(names, (float(half * w) for w in way), strict=True)))
        axes.append(Axis(name=f"{_GAS}{number}", low=-1.0, high=1.0))
    return replace(around, composition=mean), tuple(gas), axes
