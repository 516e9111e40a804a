"""Why a computed number may or may not be believed."""

from enum import IntEnum


class Verdict(IntEnum):
    """The verdicts the model gives; the same numbers as in the agent's list of qualities."""

    GOOD = 0
    OUT_OF_MODEL = 8  # outside the range the model was built for
    INPUT_MISSING = 9  # an input it needs has no usable number
    UNKNOWN_WORD = 10  # a load step that the truth table does not hold
    NO_LIMIT = 11  # no limit entered: there is no margin to state
    NO_THROUGH_FLOW = 12  # the stage passes too little gas to judge its temperature
