"""The model's verdicts carry the numbers of the agent's qualities, which are stored."""

from agent.records import Quality
from model.verdicts import Verdict


def test_verdicts_and_qualities_carry_the_same_numbers() -> None:
    for verdict in Verdict:
        assert Quality[verdict.name].value == verdict.value
