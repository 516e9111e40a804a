"""Our numbers against published ones, and proof that each of these checks can fail."""

import math
from collections import Counter

import pytest

from tests.reference.cases import CASES, Case, Topic

STEP = 1e-5  # relative step that finds how much an outcome hangs on an input


def case_id(case: Case) -> str:
    return case.name


@pytest.mark.parametrize("case", CASES, ids=case_id)
def test_our_number_meets_the_published_one(case: Case) -> None:
    assert case.outcome(case.inputs) == pytest.approx(case.expected, abs=case.tolerance, rel=0)


def share_of(case: Case, name: str) -> float:
    """Relative change of the outcome over relative change of one input."""

    def moved(sign: int) -> float:
        return case.outcome({**case.inputs, name: case.inputs[name] * (1 + sign * STEP)})

    return (moved(1) - moved(-1)) / (2 * STEP * case.outcome(case.inputs))


@pytest.mark.parametrize(
    ("case", "name"),
    [pytest.param(case, name, id=f"{case.name} by {name}") for case in CASES for name in case.inputs],
)
def test_a_wrong_input_turns_the_check_red(case: Case, name: str) -> None:
    """Each input is moved both ways by twice the relative tolerance, or, where the outcome hangs on it less
    than in proportion, by that over the share: the outcome then moves by two tolerances at least."""
    tolerance = case.tolerance / abs(case.expected)
    share = share_of(case, name)
    assert share != 0, "the outcome does not hang on this input: it is no input"
    step = 2 * tolerance / min(1.0, abs(share))
    assert step < 0.5, "only a wild error of this input would be seen: it is no check of it"
    for sign in (1, -1):
        outcome = case.outcome({**case.inputs, name: case.inputs[name] * (1 + sign * step)})
        assert math.isfinite(outcome)
        assert abs(outcome - case.expected) > case.tolerance


def test_every_topic_is_checked_by_several_sources_and_rows() -> None:
    rows = Counter(case.topic for case in CASES)
    for topic in (
        Topic.GAS,
        Topic.VOLUMETRIC_EFFICIENCY,
        Topic.DISCHARGE_TEMPERATURE,
        Topic.KINEMATICS_AND_ROD_LOAD,
    ):
        assert rows[topic] >= 2
        assert len({c.source.split(",")[0] for c in CASES if c.topic is topic}) >= 2
    assert len(CASES) >= 10
    assert len({case.source.split(",")[0] for case in CASES}) >= 5


def test_the_property_library_is_never_the_source() -> None:
    assert not any("coolprop" in case.source.lower() for case in CASES)


def test_every_tolerance_has_a_reason_and_is_no_wider_than_one_per_cent() -> None:
    for case in CASES:
        assert case.reason
        assert case.tolerance <= 0.01 * abs(case.expected)
