"""Builds the truth table of load steps: a word of the plant and what it makes of every end."""

from collections.abc import Mapping, Sequence

from agent.siteplan.document import Place
from agent.siteplan.reader import Reader
from agent.siteplan.schema import LoadStepBlock
from agent.siteplan.subjects import Declared, end
from model.machine import End, LoadStep, Side, Stage

Ends = frozenset[tuple[int, Side]]


def read_load_steps(
    reader: Reader, place: Place, has: Declared, stages: tuple[Stage, ...]
) -> tuple[LoadStep, ...]:
    """The truth table. What could be read of the stages says which ends have pockets."""
    known = {(c.number, e.side): e for s in stages for c in s.cylinders for e in c.ends}
    steps: list[LoadStep] = []
    seen: dict[str, Place] = {}
    for index in range(reader.count(place)):
        here = (*place, index)
        block = reader.block(LoadStepBlock, here)
        if block is None:
            continue
        if block.word in seen:
            line = reader.document.line(seen[block.word])
            reader.fault((*here, "word"), "each word once in a unit", f"line {line} has it already")
        seen.setdefault(block.word, (*here, "word"))
        held = _ends(reader, (*here, "held_open"), block.held_open, has)
        opened = _ends(reader, (*here, "pockets_open"), block.pockets_open, has)
        _check_pockets(reader, (*here, "pockets_open"), block.pockets_open, known)
        positions = _by_end(reader, (*here, "pocket_positions"), block.pocket_positions, has)
        _check_positions(reader, (*here, "pocket_positions"), block.pocket_positions, known)
        closings = _by_end(reader, (*here, "valves_close"), block.valves_close, has)
        _check_closings(reader, (*here, "valves_close"), block.valves_close, held)
        steps.append(
            LoadStep(
                word=block.word,
                index=index,
                held_open=held,
                permitted=block.permitted,
                pockets_open=opened,
                pocket_positions=positions,
                valve_closings=closings,
                lowest_suction_pa=block.lowest_suction,
            )
        )
    if steps and len(steps) == reader.count(place) and not any(step.permitted for step in steps):
        reader.fault(place, "a load step that is permitted", value="")
    return tuple(steps)


def _ends(reader: Reader, place: Place, words: Sequence[str], has: Declared) -> Ends:
    found: set[tuple[int, Side]] = set()
    for index, word in enumerate(words):
        named = _named(reader, (*place, index), word, has)
        if named is None:
            continue
        if named in found:
            reader.fault((*place, index), "each end once in a load step")
        found.add(named)
    return frozenset(found)


def _by_end(
    reader: Reader, place: Place, values: Mapping[str, float], has: Declared
) -> tuple[tuple[int, Side, float], ...]:
    found: dict[tuple[int, Side], float] = {}
    for word, value in values.items():
        named = _named(reader, (*place, word), word, has)
        if named is None:
            continue
        if named in found:
            reader.fault((*place, word), "each end once in a load step", value=repr(word))
        found[named] = value
    return tuple((number, side, value) for (number, side), value in found.items())


def _named(reader: Reader, place: Place, word: str, has: Declared) -> tuple[int, Side] | None:
    """The end that a word names; a fault if it names none of this unit."""
    named = end(word)
    if named is None:
        reader.fault(place, "an end, e.g. 'cylinder 1 head'", value=repr(word))
    elif named not in has.ends and has.sure:
        known = [f"cylinder {number} {side}" for number, side in sorted(has.ends)]
        reader.fault(place, "an end that this unit has", f"it has {', '.join(known)}", value=repr(word))
        return None
    return named


def _check_pockets(
    reader: Reader, place: Place, words: Sequence[str], known: Mapping[tuple[int, Side], End]
) -> None:
    for index, word in enumerate(words):
        named = end(word)
        if named is not None and named in known and not known[named].pocket_clearance:
            reader.fault((*place, index), "an end with a pocket", "say what the pocket of that end adds")


def _check_positions(
    reader: Reader, place: Place, values: Mapping[str, float], known: Mapping[tuple[int, Side], End]
) -> None:
    for word in values:
        named = end(word)
        if named is not None and named in known and not known[named].variable_pocket_clearance:
            hint = "say what the variable_pocket of that end adds when it is all the way out"
            reader.fault((*place, word), "an end with a variable pocket", hint, value=repr(word))


def _check_closings(reader: Reader, place: Place, values: Mapping[str, float], held: Ends) -> None:
    for word in values:
        if end(word) in held:
            reader.fault((*place, word), "an end that this step does not hold open", value=repr(word))
