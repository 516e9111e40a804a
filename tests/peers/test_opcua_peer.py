"""An OPC UA client that is not ours reads values, units, ranges and history of the plant's server."""

import asyncio
import socket
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from agent.siteplan.load import load_site
from simulator.instrument_faults import SampleQuality
from simulator.plant import Plant
from simulator.plant_main import scenario_path
from simulator.sample import Sample
from simulator.scenario import load_scenario
from simulator.serve_opcua import NAMESPACE, OpcuaWire

pytestmark = pytest.mark.peers

SITE = scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml"
NOW = 1_800_000_000.4
SECONDS = 30
STATUS = {
    SampleQuality.GOOD: "Good",
    SampleQuality.UNCERTAIN: "UncertainSensorNotAccurate",
    SampleQuality.BAD: "BadSensorFailure",
}


def test_the_peer_reads_what_the_plant_serves(start_peer: Any) -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        address = f"opc.tcp://127.0.0.1:{probe.getsockname()[1]}/ostmere"
    site = load_site(SITE, addresses={"control-system": address})
    plant = Plant(site, load_scenario(scenario_path("quiet"), site), pace=1.0, seed=1, steps=720)
    sent: list[list[Sample]] = []
    for n in range(SECONDS):
        lot = [s for s in plant.sample(NOW + n, None) if s.tag.source == "control-system"]
        if n == SECONDS - 2:  # one transmitter fails for a second
            lot[0] = Sample(tag=lot[0].tag, time=NOW + n, value=None)
        if n == SECONDS - 3:  # another doubts itself, a third is called bad with its last value
            lot[1] = replace(lot[1], quality=SampleQuality.UNCERTAIN)
            lot[2] = replace(lot[2], quality=SampleQuality.BAD)
        if 5 <= n < 15:  # the link was lost: what it kept comes afterwards, as the past alone
            lot = [replace(s, historical=True) for s in lot]
        sent.append(lot)
    names = [s.tag.address.rpartition("s=")[2] for s in sent[0]]
    assert len(names) > 10

    async def ask() -> dict[str, Any]:
        async with OpcuaWire(address, site.units, "control-system") as wire:
            await wire.cut()
            await wire.restore()
            for lot in [*sent[:5], *sent[15:], *sent[5:15]]:
                await wire.write(lot)
            peer = await asyncio.to_thread(start_peer, "opcua.mjs", address)
            peer.tell({"uri": NAMESPACE, "names": names, "from": NOW, "to": NOW + SECONDS})
            answer: dict[str, Any] = await asyncio.to_thread(peer.answer)
            await asyncio.to_thread(peer.close)
            return answer

    found = asyncio.run(ask())
    assert list(found) == names
    codes = {
        "barg": 4342098,
        "degC": 4408652,
        "rpm": 5394509,
        "kW": 4937556,
        "Nm3/h": -1,
    }  # source: UNECE table
    seen: set[str] = set()
    for place, name in enumerate(names):
        node, last = found[name], sent[-1][place]
        assert (node["status"], node["time"]) == ("Good", last.time)
        assert node["value"] == as_served(node["type"], last.value)
        if node["type"] in ("Float", "Double"):
            tag = last.tag
            low, high = ((v - tag.offset) / tag.scale for v in (tag.span_low, tag.span_high))
            assert node["range"] == pytest.approx([low, high])
            assert (node["unit"]["name"], node["unit"]["id"]) == (tag.unit, codes[tag.unit])
            assert node["unit"]["uri"] == "http://www.opcfoundation.org/UA/units/un/cefact"
        times = [v["time"] for v in node["history"]]
        assert times == pytest.approx([NOW + n for n in range(SECONDS)], abs=1e-3)
        for was, lot in zip(node["history"], sent, strict=True):
            sample = lot[place]
            assert was["status"] == STATUS[sample.stated_quality]
            if sample.value is not None:
                assert was["value"] == as_served(node["type"], sample.value)
        seen.update(v["status"] for v in node["history"])
    assert seen == set(STATUS.values())


def as_served(kind: str, value: Any) -> Any:
    return float(np.float32(value)) if kind == "Float" else value
