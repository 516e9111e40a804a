"""Public formulas tell their parameters, units and sources; read by a test so that they stay true."""

import importlib
import inspect
import re
from collections.abc import Callable, Iterator

import pytest

MODULES = (
    "budget", "calibration", "cooler", "curves", "cycle", "dew", "driver", "efficiency", "evaluate", "gas",
    "jacobian", "kinematics", "leaks", "margins", "monte_carlo", "nuisances", "propagation",
    "relative_capacity", "relief_loads", "rodload", "stage", "stage_work", "steps", "surface", "teaching",
    "throw", "train", "train_full", "train_sketch",
    "train_streams", "uncertainty", "valves", "wet",
)  # fmt: skip
NUMBERS = re.compile(r"^(float|array_like|ndarray(?! of bool)|int|sequence of float)\b")
UNIT = re.compile(r"\[[^\]]+\]")
# plumbing between modules: no formula, nothing to cite
PLUMBING = {"load_or_build", "normalised", "nodes", "tabulate", "end_runs", "opening_angles", "stage_frame",
            "held_open", "stage_inputs", "margin", "share_left", "uncertain_results", "table",
            "alike", "lines_of", "providers", "redrawn", "rough_sketch", "stage_ends", "start_of",
            "unknowns", "makes", "frame_rows", "turn_grid", "lowest_suction"}  # fmt: skip


def public_functions() -> Iterator[tuple[str, Callable[..., object]]]:
    for module_name in MODULES:
        module = importlib.import_module(f"model.{module_name}")
        for name, item in vars(module).items():
            if inspect.isclass(item) and item.__module__ == module.__name__:
                for method, function in vars(item).items():
                    target = getattr(function, "__func__", function)
                    if (
                        inspect.isfunction(target)
                        and not method.startswith("_")
                        and len(inspect.signature(target).parameters) > 1
                    ):
                        yield f"{module_name}.{name}.{method}", target
            elif inspect.isfunction(item) and item.__module__ == module.__name__ and not name.startswith("_"):
                yield f"{module_name}.{name}", item


FUNCTIONS = [pytest.param(item, id=name) for name, item in public_functions()]
FORMULAS = [
    pytest.param(item, id=name)
    for name, item in public_functions()
    if name.count(".") == 1 and name.split(".")[1] not in PLUMBING
]


def section(function: Callable[..., object], title: str) -> str:
    text = inspect.cleandoc(function.__doc__ or "")
    found = re.search(rf"^{title}\n-+\n(.*?)(?=^\w[\w ]*\n-+\n|\Z)", text, re.MULTILINE | re.DOTALL)
    return found.group(1) if found else ""


def entries(function: Callable[..., object]) -> dict[str, tuple[str, str]]:
    """Name -> (type, description) of the parameters told."""
    parts = re.split(r"^(\w+) : (.+)$", section(function, "Parameters"), flags=re.MULTILINE)[1:]
    return {parts[i]: (parts[i + 1], parts[i + 2]) for i in range(0, len(parts), 3)}


def test_there_are_formulas_to_read() -> None:
    assert len(FORMULAS) > 25


@pytest.mark.parametrize("function", FORMULAS)
def test_formulas_name_their_parameters_in_order(function: Callable[..., object]) -> None:
    assert list(entries(function)) == list(inspect.signature(function).parameters)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_every_number_told_has_its_unit(function: Callable[..., object]) -> None:
    for name, (kind, description) in entries(function).items():
        if NUMBERS.match(kind):
            assert UNIT.search(description), name
    if NUMBERS.match(section(function, "Returns")):
        assert UNIT.search(section(function, "Returns"))


@pytest.mark.parametrize("function", FORMULAS)
def test_formulas_say_where_they_come_from(function: Callable[..., object]) -> None:
    assert section(function, "References").strip()
    assert section(function, "Returns").strip()
