import itertools
import math
from collections.abc import Callable

import numpy as np
import pytest

from agent.manipulation.running import (
    AGREEMENT_S,
    DISPUTE_S,
    SETTLING_S,
    TRANSITIONS,
    Event,
    Judgement,
    RunningState,
    Vote,
    judge,
)
from agent.records import Frame, Quality, RunState
from agent.siteplan.plan import UnitPlan

MakeFrame = Callable[..., Frame]
HOT = (2e6, 4e6, 300.0, 350.0)
LEVEL = (2e6, 2e6, 300.0, 305.0)


@pytest.fixture
def frame(plan: UnitPlan) -> MakeFrame:
    """A frame with stage values, speed (rated is 100 rad/s) and run signal; NaN is no number."""

    def make(
        tick: int,
        *,
        stage: tuple[float, float, float, float] = (math.nan,) * 4,
        speed: float = math.nan,
        run: float = math.nan,
    ) -> Frame:
        values = np.array([*stage, speed, math.nan, run], dtype=np.float32)
        quality = np.where(np.isnan(values), Quality.STALE, Quality.GOOD).astype(np.uint8)
        return Frame(
            unit=plan.id, tick=tick, values=values, quality=quality, ages=np.zeros(7, dtype=np.float32)
        )

    return make


def test_every_pair_of_state_and_event_is_in_the_table() -> None:
    assert set(TRANSITIONS) == set(itertools.product(RunState, Event))
    assert set(TRANSITIONS.values()) == set(RunState)


def test_blindness_ends_every_state_and_a_dispute_that_lasts_does_too() -> None:
    assert {TRANSITIONS[state, Event.BLIND] for state in RunState} == {RunState.NOT_KNOWN}
    assert {TRANSITIONS[state, Event.DISPUTED_LONG] for state in RunState} == {RunState.NOT_KNOWN}


R, S, A = Vote.RUNS, Vote.STANDS, Vote.ABSENT


@pytest.mark.parametrize(
    ("votes", "expected"),
    [
        ((R, A, A), Judgement.RUNS),
        ((S, A, A), Judgement.STANDS),
        ((R, S, R), Judgement.RUNS),  # the run signal comes first
        ((S, A, R), Judgement.STANDS),  # a stopped machine keeps pressure and heat
        ((S, R, R), Judgement.RUNS),  # two against one
        ((R, S, S), Judgement.STANDS),
        ((A, R, R), Judgement.RUNS),
        ((A, S, S), Judgement.STANDS),
        ((A, R, A), Judgement.RUNS),
        ((A, S, A), Judgement.STANDS),
        ((A, S, R), Judgement.DISPUTED),
        ((A, R, S), Judgement.DISPUTED),
        ((A, A, R), Judgement.BLIND),
        ((A, A, S), Judgement.BLIND),
        ((A, A, A), Judgement.BLIND),
    ],
)
def test_votes(votes: tuple[Vote, Vote, Vote], expected: Judgement) -> None:
    assert judge(*votes) is expected


def test_an_agent_that_starts_on_a_running_machine_says_running_at_once(
    plan: UnitPlan, frame: MakeFrame
) -> None:
    assert RunningState(plan).update(frame(100, run=1.0)) is RunState.RUNNING


def test_a_start_is_seen_after_five_seconds_and_settled_after_thirty(
    plan: UnitPlan, frame: MakeFrame
) -> None:
    state = RunningState(plan)
    state.update(frame(99, run=0.0))
    seen = {tick: state.update(frame(tick, run=1.0)) for tick in range(100, 135)}
    assert seen[100 + AGREEMENT_S - 1] is RunState.STOPPED
    assert seen[100 + AGREEMENT_S] is RunState.STARTING
    assert seen[100 + SETTLING_S - 1] is RunState.STARTING
    assert seen[100 + SETTLING_S] is RunState.RUNNING


def test_a_stop_is_seen_within_fifteen_seconds(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, run=1.0, stage=HOT))
    seen = [state.update(frame(tick, run=0.0, stage=HOT)) for tick in range(101, 116)]
    assert seen[0] is RunState.RUNNING
    assert seen[AGREEMENT_S] is RunState.STOPPED
    assert seen[-1] is RunState.STOPPED


def test_a_flicker_moves_nothing(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, run=1.0))
    for tick in range(101, 160):
        assert state.update(frame(tick, run=float(tick % 4 == 0))) is RunState.RUNNING


def test_lost_inputs_are_not_known_at_once_and_return(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, run=1.0))
    assert state.update(frame(101)) is RunState.NOT_KNOWN
    assert state.update(frame(102, run=1.0)) is RunState.RUNNING


def test_a_lasting_dispute_is_not_known(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, speed=90.0, stage=HOT))
    seen = {tick: state.update(frame(tick, speed=0.0, stage=HOT)) for tick in range(101, 165)}
    assert seen[101 + DISPUTE_S - 1] is RunState.RUNNING
    assert seen[101 + DISPUTE_S] is RunState.NOT_KNOWN


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        ({"speed": 50.1}, (A, R, A)),
        ({"speed": 50.0}, (A, S, A)),
        ({"run": 1.0, "stage": HOT}, (R, A, R)),
        ({"stage": LEVEL}, (A, A, S)),
        ({"stage": (2e6, 4e6, 300.0, 309.0)}, (A, A, S)),  # pressure without heat
        ({"stage": (2e6, 2.2e6, 300.0, 350.0)}, (A, A, S)),  # heat without pressure
        ({"stage": (math.nan, 4e6, 300.0, 350.0)}, (A, A, A)),
        ({"stage": (0.0, 4e6, 300.0, 350.0)}, (A, A, A)),
    ],
)
def test_what_each_input_votes(
    plan: UnitPlan, frame: MakeFrame, values: dict[str, object], expected: tuple[Vote, Vote, Vote]
) -> None:
    assert RunningState(plan).votes(frame(100, **values)) == expected


def test_a_gap_of_ticks_counts_as_time(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, run=0.0))
    state.update(frame(101, run=1.0))
    assert state.update(frame(107, run=1.0)) is RunState.STARTING


def test_frames_out_of_order_are_refused(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, run=1.0))
    with pytest.raises(ValueError, match="tick 100"):
        state.update(frame(100, run=1.0))


def test_reset_forgets(plan: UnitPlan, frame: MakeFrame) -> None:
    state = RunningState(plan)
    state.update(frame(100, run=1.0))
    state.reset()
    assert state.state is RunState.NOT_KNOWN
    assert state.update(frame(50, run=0.0)) is RunState.STOPPED
