"""One unit's line from frames to results: running state, evaluation, quality."""

import logging
from collections.abc import Iterable, Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from agent.accuracy import accuracy_of
from agent.manipulation.running import RunningState
from agent.records import DerivedRow, Frame, Quality, RunState
from agent.siteplan.plan import UnitPlan
from model.calibration import Calibration
from model.evaluate import Measured
from model.jacobian import JacobianKeeper
from model.nuisances import calibrated, calibration_nuisances
from model.quantities import series_name
from model.surface import GasSurface

_log = logging.getLogger(__name__)

# Larger batches fall out of the processor's cache and run slower.
_CHUNK = 200

RUN_STATE = series_name("unit", "run_state")

_MASK = {
    RunState.NOT_KNOWN: Quality.INPUT_MISSING,
    RunState.STOPPED: Quality.NOT_RUNNING,
}


class UnitLine:
    """Evaluates frames of one unit; remembers its running state between live ticks."""

    def __init__(
        self, plan: UnitPlan, gas: GasSurface, *, configuration: int, calibration: Calibration | None = None
    ) -> None:
        self.plan = plan
        self._gas = gas
        self._configuration = configuration
        self._input_names = plan.input_names()
        self._result_names = plan.result_names()
        self._run_state_place = self._result_names.index(RUN_STATE)
        self._accuracy = accuracy_of(plan)
        self._required = np.array([i.required for i in plan.inputs])
        self._failing = False
        self.use(calibration)
        self.reset()

    def use(self, calibration: Calibration | None) -> None:
        """Take up a calibration, or none; frames from now on are judged by it."""
        unit, gas = self.plan.unit, self._gas
        nuisances = () if calibration is None else calibration_nuisances(unit, gas, calibration)
        # One keeper for live and late frames: its numbers follow from the frame alone.
        self._keeper = JacobianKeeper(calibrated(unit, gas, calibration), self._accuracy, nuisances)

    def reset(self) -> None:
        self._running = RunningState(self.plan)
        self._keeper.reset()

    def live(self, frames: Iterable[Frame]) -> list[DerivedRow]:
        """Results of frames in the order of time, each tick once."""
        ordered = list(frames)
        return self._derive(ordered, [self._running.update(f) for f in ordered])

    def again(self, frames: Iterable[Frame]) -> list[DerivedRow]:
        """Results of frames that late data changed or made; leaves the live running state alone."""
        ordered = sorted(frames, key=lambda f: f.tick)
        fresh = RunningState(self.plan)
        return self._derive(ordered, [fresh.update(f) for f in ordered])

    def _derive(self, frames: Sequence[Frame], states: Sequence[RunState]) -> list[DerivedRow]:
        rows = []
        for part, part_states in _chunks(frames, states):
            values, quality = self._evaluate(part)
            for k, (frame, state) in enumerate(zip(part, part_states, strict=True)):
                rows.append(self._row(frame, state, values[k], quality[k]))
        return rows

    def _evaluate(self, frames: Sequence[Frame]) -> tuple[NDArray[np.float64], NDArray[np.uint8]]:
        inputs = np.stack([f.values for f in frames]).astype(np.float64)
        try:
            measured = Measured.from_inputs(self.plan.unit, self._input_names, inputs)
            values, quality = self._keeper.update(measured).table(self._result_names)
        except Exception:  # noqa: BLE001 - see below
            # A fault of ours in one unit must not blind the others; its numbers are withheld, never guessed.
            if not self._failing:
                _log.exception("evaluation failed, results withheld", extra={"unit": self.plan.id})
            self._failing = True
            shape = (len(frames), len(self._result_names))
            return np.full(shape, np.nan), np.full(shape, Quality.OUT_OF_MODEL, dtype=np.uint8)
        self._failing = False
        return values, quality

    def _row(
        self, frame: Frame, state: RunState, values: NDArray[np.float64], quality: NDArray[np.uint8]
    ) -> DerivedRow:
        stored = values.astype(np.float32)
        marks = quality.copy()
        if state in _MASK:
            stored[:] = np.nan
            # What has no limit has none whether the machine runs or not.
            marks[marks != Quality.NO_LIMIT] = _MASK[state]
        elif np.any(frame.quality[self._required] == Quality.UNCERTAIN):
            marks[marks == Quality.GOOD] = Quality.UNCERTAIN
        lost = ~np.isfinite(stored) & (marks <= Quality.UNCERTAIN)
        marks[lost] = Quality.OUT_OF_MODEL
        stored[marks > Quality.UNCERTAIN] = np.nan
        stored[self._run_state_place] = float(state)
        marks[self._run_state_place] = Quality.GOOD
        return DerivedRow(
            unit=frame.unit, tick=frame.tick, configuration=self._configuration, values=stored, quality=marks
        )


def _chunks(
    frames: Sequence[Frame], states: Sequence[RunState]
) -> Iterator[tuple[Sequence[Frame], Sequence[RunState]]]:
    for first in range(0, len(frames), _CHUNK):
        yield frames[first : first + _CHUNK], states[first : first + _CHUNK]
