"""The door: a site file becomes a `SitePlan`, or every fault it has.

The file is read in blocks. A block with faults is left out and the rest is checked all the same, so one
reading lists everything.
"""

import hashlib
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from agent.siteplan.alarm_settings import read_alarm_settings
from agent.siteplan.document import Place, read_document
from agent.siteplan.equipment import read_driver
from agent.siteplan.errors import SiteFileError
from agent.siteplan.inputs import read_flow_reference, read_inputs
from agent.siteplan.load_steps import read_load_steps
from agent.siteplan.nameplate import read_frame, read_gas, read_limits, read_stages
from agent.siteplan.notices import unit_notices, unused_sources
from agent.siteplan.plan import SitePlan, Source, SourceKind, UnitPlan
from agent.siteplan.reader import Reader, closest
from agent.siteplan.schema import SCHEMA, FileBlock, SiteBlock, UnitBlock
from agent.siteplan.sources import check_address, read_sources
from agent.siteplan.subjects import declared
from model.machine import Unit

_SEA_LEVEL_PA = 101325.0


def load_site(path: Path | str, addresses: Mapping[str, str] | None = None) -> SitePlan:
    """Read a site file.

    Parameters
    ----------
    path : Path or str
        The file.
    addresses : mapping, optional
        Source name -> address used instead of the one in the file.

    Returns
    -------
    SitePlan
        The site as frozen values, in SI and absolute.

    Raises
    ------
    SiteFileError
        With every fault of the file.
    """
    document = read_document(Path(path))
    reader = Reader(document)
    plan = _plan(reader, addresses or {})
    if plan is None or reader.faults:
        raise SiteFileError(reader.faults)
    return plan


def _plan(reader: Reader, addresses: Mapping[str, str]) -> SitePlan | None:
    version = reader.at(("schema",))
    if isinstance(version, str) and version.isdecimal() and int(version) > SCHEMA:
        # A newer file may mean something else by the same keys: nothing more is said about it.
        reader.faults.clear()
        reader.fault(("schema",), f"schema {SCHEMA} or older", "a newer version of the tool is needed")
        return None
    file = reader.block(FileBlock, ())
    site = _site(reader)
    raw_sources = reader.at(("sources",))
    sources = {}
    if isinstance(raw_sources, dict):
        sources = read_sources(reader, ("sources",), site.name if site else "", raw_sources)
        sources = _readdressed(reader, sources, raw_sources, addresses)
    plans = _units(reader, sources)
    if file is None or site is None or reader.faults:
        return None
    for notice in unused_sources(sources, plans):
        reader.notice(notice)
    text = reader.document.text
    return SitePlan(
        schema=file.schema_,
        name=site.name,
        time_zone=site.time_zone,
        barometer_pa=site.barometer,
        simulated=site.simulated,
        sources={
            name: replace(_with_topics(source, plans), takes_simulated=site.simulated)
            for name, source in sources.items()
        },
        units=plans,
        text=text,
        digest=hashlib.sha256(text.encode()).hexdigest(),
        notices=tuple(reader.notices),
    )


def _site(reader: Reader) -> SiteBlock | None:
    place: Place = ("site",)
    site = reader.block(SiteBlock, place) if "site" in reader.keys(()) else None
    # Without a barometer the rest is still checked; the missing one is a fault by itself.
    reader.barometer_pa = site.barometer if site is not None else _SEA_LEVEL_PA
    return site


def _readdressed(
    reader: Reader,
    sources: Mapping[str, Source],
    declared_names: Mapping[str, Any],
    addresses: Mapping[str, str],
) -> dict[str, Source]:
    changed = dict(sources)
    for name, address in addresses.items():
        place: Place = ("sources", name)
        if name not in declared_names:
            reader.fault(place, "a source of this file", closest(name, declared_names), value="")
        elif name in changed and check_address(reader, (*place, "address"), changed[name].kind, address):
            changed[name] = replace(changed[name], address=address)
    return changed


def _with_topics(source: Source, plans: tuple[UnitPlan, ...]) -> Source:
    """Without filters of its own a source subscribes to exactly the topics its inputs name."""
    if source.topics or source.kind is not SourceKind.MQTT_JSON:
        return source
    topics = {i.address: None for plan in plans for i in plan.inputs if i.source == source.name}
    return replace(source, topics=tuple(topics))


def _units(reader: Reader, sources: Mapping[str, Source]) -> tuple[UnitPlan, ...]:
    plans = []
    taken: dict[tuple[str, str], Place] = {}
    ids: dict[str, Place] = {}
    for index in range(reader.count(("units",))):
        place: Place = ("units", index)
        block = reader.block(UnitBlock, place)
        if block is not None:
            first = ids.setdefault(block.id.casefold(), (*place, "id"))
            if first != (*place, "id"):
                line = reader.document.line(first)
                reader.fault((*place, "id"), "an id of its own", f"line {line} has it already")
        plan = _unit(reader, place, block, sources, taken)
        if plan is not None:
            plans.append(plan)
    return tuple(plans)


def _unit(
    reader: Reader,
    place: Place,
    block: UnitBlock | None,
    sources: Mapping[str, Source],
    taken: dict[tuple[str, str], Place],
) -> UnitPlan | None:
    """The plan of one unit. Its blocks are checked also where the unit lacks a key of its own."""
    before = len(reader.faults)

    keys = reader.keys(place)
    has = declared(reader.at((*place, "stages")))
    frame = read_frame(reader, (*place, "frame")) if "frame" in keys else None
    gas = read_gas(reader, (*place, "gas")) if "gas" in keys else None
    stages = read_stages(reader, (*place, "stages"))
    steps = read_load_steps(reader, (*place, "load_steps"), has, stages)
    driver = read_driver(reader, (*place, "driver"))
    _check_stepless(reader, place)
    limits = read_limits(reader, (*place, "limits"), has)
    inputs = read_inputs(reader, (*place, "inputs"), has, sources, taken)
    flow_reference = read_flow_reference(reader, place, inputs)
    alarms = read_alarm_settings(reader, (*place, "alarms"))
    _check_load_step_input(reader, place)
    if block is None or frame is None or gas is None or len(reader.faults) > before:
        return None
    unit = Unit(
        id=block.id,
        name=block.name,
        service=block.service,
        stroke_m=frame.stroke,
        connecting_rod_m=frame.connecting_rod,
        rated_speed_rad_s=frame.rated_speed,
        ambient_pressure_pa=reader.barometer_pa or _SEA_LEVEL_PA,
        composition=gas[0],
        domain=gas[1],
        stages=stages,
        load_steps=steps,
        limits=limits,
        driver=driver,
        packing_vent_pa=block.packing_vent,
        first_recycle="first" in block.recycles,
        final_recycle="final" in block.recycles,
    )
    plan = UnitPlan(unit=unit, inputs=inputs, alarm_settings=alarms, flow_reference=flow_reference)
    for notice in unit_notices(plan):
        reader.notice(notice)
    return plan


def _check_stepless(reader: Reader, place: Place) -> None:
    if reader.at((*place, "stepless_valves")) in (True, "true"):
        reader.fault(
            (*place, "stepless_valves"), "a unit without stepless valve control",
            "a closing angle that moves freely is not modelled; enter load steps with valves_close",
        )  # fmt: skip


def _check_load_step_input(reader: Reader, place: Place) -> None:
    inputs = reader.at((*place, "inputs"))
    named = [i.get("quantity") for i in inputs if isinstance(i, dict)] if isinstance(inputs, list) else []
    if reader.count((*place, "load_steps")) > 1 and named and "load_step" not in named:
        hint = "else nobody knows which ends are held open"
        reader.fault((*place, "inputs"), "an input for the load step, as there are several", hint, value="")
