"""What the inputs of a unit are worth, as the model wants to know it."""

from agent.siteplan.plan import UnitPlan
from model.uncertainty import InputAccuracy


def accuracy_of(plan: UnitPlan) -> InputAccuracy:
    """What the inputs of a unit are worth; one address read twice is one error."""
    return InputAccuracy.from_limits(
        plan.input_names(),
        [i.accuracy for i in plan.inputs],
        [f"{i.source} {i.address}" for i in plan.inputs],
    )
