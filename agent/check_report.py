"""What ``throwline check SITE`` says: all that is wrong with a site file, or what it describes."""

from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Final

from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from agent.database import PAGE_SIZE
from agent.siteplan.errors import SiteFileError
from agent.siteplan.load import load_site
from agent.siteplan.nameplate import piston_speed_m_s
from agent.siteplan.notices import limits_not_entered
from agent.siteplan.plan import SitePlan, UnitPlan
from agent.siteplan.subjects import spoken
from agent.storage.series import KEEP_DERIVED_S, KEEP_INPUTS_S
from model import units
from model.machine import Cylinder, End, EndState, LoadStep
from model.quantities import QUANTITIES

# A stored input is a value, its quality and its age; a stored result a value and its quality.
_INPUT_BYTES: Final = 4 + 1 + 4
_RESULT_BYTES: Final = 4 + 1
# What a row costs beside its values (time, headers); a test measures it.
_ROW_BYTES: Final = 16
_DAY_S: Final = 86_400


def report(path: Path, console: Console | None = None) -> int:
    """Print the report of a site file.

    Parameters
    ----------
    path : Path
        The site file.
    console : rich.console.Console, optional
        Where to print; standard output if none is given.

    Returns
    -------
    int
        Exit code: 0 if the file can be used, 1 if it has faults.
    """
    out = console or Console(highlight=False)
    try:
        plan = load_site(path)
    except SiteFileError as error:
        # One fault a line, never broken, so that an editor or a search finds file and line.
        out.print(str(error), markup=False, highlight=False, soft_wrap=True)
        return 1
    out.print(describe(plan, path.name))
    return 0


def describe(plan: SitePlan, file: str) -> RenderableType:
    """The summary of a site file without faults."""
    parts: list[RenderableType] = [*_head(plan)]
    for unit_plan in plan.units:
        parts += ["", *_unit(unit_plan, plan.barometer_pa)]
    parts += ["", _title("Notices"), _listed(plan.notices or ("none",))]
    parts += ["", _title("Store"), _listed(_store(plan))]
    inputs = sum(len(u.inputs) for u in plan.units)
    limits = sum(len(u.unit.limits) for u in plan.units)
    counts = f"{_count(len(plan.units), 'unit')}, {_count(inputs, 'input')}, {_count(limits, 'limit')}"
    parts += ["", Text(f"{file}: no faults. {counts}, {_count(len(plan.notices), 'notice')}.", style="bold")]
    return Group(*parts)


def _count(number: int, word: str) -> str:
    return f"{number} {word}{'' if number == 1 else 's'}"


def _title(text: str) -> Text:
    return Text(text, style="bold")


def _listed(lines: Iterable[str]) -> RenderableType:
    table = Table.grid(padding=(0, 1))
    for line in lines:
        table.add_row("-", Text(line))
    return Padding(table, (0, 0, 0, 2))


def _table(*columns: str) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")
    for name in columns:
        table.add_column(name.lstrip(">"), justify="right" if name.startswith(">") else "left")
    return table


def _head(plan: SitePlan) -> Iterator[RenderableType]:
    yield Text(plan.name + (" (simulated: an invented plant)" if plan.simulated else ""), style="bold")
    barometer = units.format_with_unit(plan.barometer_pa, "bara", "pressure", 4)
    yield f"  time zone {plan.time_zone}, barometer {barometer}"
    table = _table("source", "kind", "address", ">inputs")
    for source in plan.sources.values():
        count = sum(i.source == source.name for u in plan.units for i in u.inputs)
        table.add_row(source.name, source.kind.value.replace("_", " "), Text(source.address), str(count))
    yield Padding(table, (1, 0, 0, 2))


def _unit(plan: UnitPlan, barometer_pa: float) -> Iterator[RenderableType]:
    unit = plan.unit
    yield Text.assemble((f"{unit.id}  {unit.name}", "bold"), f", {unit.service}")
    speed = piston_speed_m_s(unit.stroke_m, unit.rated_speed_rad_s)
    yield (
        f"  stroke {_mm(unit.stroke_m)}, connecting rod {_mm(unit.connecting_rod_m)}, rated "
        f"{units.format_with_unit(unit.rated_speed_rad_s, 'rpm', 'rotation', 0)}, "
        f"mean piston speed there {speed:.2f} m/s"
    )
    gas = ", ".join(f"{name} {100 * share:.2f} %" for name, share in unit.composition.items())
    yield Text(f"  gas: {gas}")
    counts = {i.source: 0 for i in plan.inputs}
    for entry in plan.inputs:
        counts[entry.source] += 1
    listed = ", ".join(f"{number} from {source}" for source, number in counts.items())
    yield f"  inputs: {listed}"
    yield Padding(_cylinders(plan), (1, 0, 0, 2))
    yield Padding(_truth_table(plan), (1, 0, 0, 2))
    yield from _limits(plan, barometer_pa)
    missing = _missing_limits(plan)
    if missing:
        yield "\n  no limit entered, hence no margin and no alarm:"
        yield _listed(missing)


def _mm(length_m: float) -> str:
    return f"{1000 * length_m:g} mm"


def _cylinders(plan: UnitPlan) -> Table:
    table = _table(
        ">stage", ">cylinder", ">bore", ">rod", "end", ">swept\ndm3", ">clearance\n%",
        ">suction\narea %", ">discharge\narea %",
    )  # fmt: skip
    for stage in plan.unit.stages:
        for cylinder in stage.cylinders:
            for index, end in enumerate(cylinder.ends):
                first = (str(stage.number), str(cylinder.number), _mm(cylinder.bore_m), _rods(cylinder))
                table.add_row(*(first if index == 0 else ("",) * 4), *_end(plan.unit.stroke_m, cylinder, end))
    return table


def _rods(cylinder: Cylinder) -> str:
    tail = f" + tail {_mm(cylinder.tail_rod_diameter_m)}" if cylinder.tail_rod_diameter_m else ""
    return _mm(cylinder.rod_diameter_m) + tail


def _end(stroke_m: float, cylinder: Cylinder, end: End) -> tuple[str, str, str, str, str]:
    return (
        end.side.value,
        f"{1000 * cylinder.area_m2(end.side) * stroke_m:.3f}",
        f"{100 * end.clearance:.1f}",
        f"{100 * end.suction_area_ratio:.1f}",
        f"{100 * end.discharge_area_ratio:.1f}",
    )


def _truth_table(plan: UnitPlan) -> Table:
    steps = plan.unit.load_steps
    table = _table("load step", *(s.word if s.permitted else f"{s.word} (not permitted)" for s in steps))
    for cylinder in plan.unit.cylinders:
        for end in cylinder.ends:
            states = [_state(step, cylinder.number, end) for step in steps]
            table.add_row(f"cylinder {cylinder.number} {end.side}", *states)
    return table


def _state(step: LoadStep, number: int, end: End) -> Text:
    if step.state(number, end.side) is EndState.HELD_OPEN:
        return Text("held open", style="bold")
    said = ["loaded"]
    added = step.added_clearance(number, end)
    if added:
        said.append(f"pockets + {100 * added:.1f} %")
    closing = step.closing_rad(number, end.side)
    if closing:
        said.append(f"valves close at {units.format_with_unit(closing, 'deg', 'angle', 0)}")
    return Text(", ".join(said), style="bold" if added or closing else "")


def _limits(plan: UnitPlan, barometer_pa: float) -> Iterator[RenderableType]:
    """The limits by who says so; equal ones of several cylinders in one line."""
    origins = dict.fromkeys((limit.source, limit.entered_by) for limit in plan.unit.limits)
    for source, entered_by in origins:
        rows: dict[tuple[str, float], list[str]] = {}
        for limit in plan.unit.limits:
            if (limit.source, limit.entered_by) == (source, entered_by):
                rows.setdefault((limit.quantity, limit.value), []).append(limit.subject)
        yield Text(f"\n  limits from {source}, entered by {entered_by}:")
        yield Padding(_limit_rows(plan, rows, barometer_pa), (0, 0, 0, 4))


def _limit_rows(
    plan: UnitPlan, rows: Mapping[tuple[str, float], list[str]], barometer_pa: float
) -> RenderableType:
    table = Table.grid(padding=(0, 2))
    for column in range(3):
        table.add_column(justify="right" if column == 2 else "left")
    for (key, value), subjects in rows.items():
        quantity = QUANTITIES[key]
        shown = units.format_with_unit(
            value, quantity.display_unit, quantity.dimension, quantity.decimals, barometer_pa=barometer_pa
        )
        table.add_row(quantity.words, _spoken_together(plan, subjects), shown)
    return table


def _spoken_together(plan: UnitPlan, subjects: list[str]) -> str:
    """Every stage; cylinder 1, 3; stage 2."""
    kind = spoken(subjects[0]).partition(" ")[0]
    if kind == "stage":
        every = [s.subject for s in plan.unit.stages]
    else:
        every = [c.subject for c in plan.unit.cylinders]
    if subjects == every and len(every) > 1:
        return f"every {kind}"
    return f"{kind} " + ", ".join(spoken(s).rpartition(" ")[2] for s in subjects)


def _missing_limits(plan: UnitPlan) -> tuple[str, ...]:
    by_quantity: dict[str, list[str]] = {}
    for subject, key in limits_not_entered(plan):
        by_quantity.setdefault(key, []).append(subject)
    return tuple(f"{QUANTITIES[key].words}: {_spoken_together(plan, s)}" for key, s in by_quantity.items())


def bytes_per_day(plan: UnitPlan) -> tuple[int, int]:
    """Projected growth of the series store by one unit [bytes a day]: its inputs, its results."""
    inputs = _ROW_BYTES + _INPUT_BYTES * len(plan.inputs)
    results = _ROW_BYTES + _RESULT_BYTES * len(plan.result_names())
    return round(_DAY_S * _on_pages(inputs)), round(_DAY_S * _on_pages(results))


def _on_pages(row: int) -> float:
    """Bytes a row takes with its part of what whole rows leave unused of a page."""
    return max(row, PAGE_SIZE / max(PAGE_SIZE // row, 1))


def _store(plan: SitePlan) -> Iterator[str]:
    days = [bytes_per_day(u) for u in plan.units]
    inputs, results = sum(d[0] for d in days), sum(d[1] for d in days)
    yield f"{_size(inputs + results)} a day: inputs {_size(inputs)}, results {_size(results)}"
    full = inputs * KEEP_INPUTS_S / _DAY_S + results * KEEP_DERIVED_S / _DAY_S
    kept = f"inputs {KEEP_INPUTS_S // _DAY_S} days, results {KEEP_DERIVED_S // _DAY_S} days"
    yield f"{_size(full)} once full ({kept}), without the journal"


def _size(number: float) -> str:
    return f"{number / 1e9:.1f} GB" if number >= 1e9 else f"{number / 1e6:.0f} MB"
