"""The agent's OPC UA source on the invented plant's server: quality, and a link that is lost and found."""

import asyncio
import socket
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

from agent.acquisition.build import build_source
from agent.clock import SystemClock
from agent.records import LinkState, Quality
from agent.siteplan.load import load_site
from simulator.instrument_faults import SampleQuality
from simulator.sample import Sample
from simulator.serve_opcua import OpcuaWire

SITE = Path(__file__).resolve().parents[3] / "simulator" / "sites" / "ostmere.yaml"


def test_status_codes_become_qualities_and_a_lost_server_is_found_again(listening: Any, until: Any) -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        address = f"opc.tcp://127.0.0.1:{probe.getsockname()[1]}/ostmere"
    site = load_site(SITE, addresses={"control-system": address})
    inputs = [i for u in site.units for i in u.inputs if i.source == "control-system"]
    tag = next(i for i in inputs if i.tag == "PT-2203")
    source = build_source(site.sources["control-system"], [tag], SystemClock())
    start = round(time.time() - 20, 1)

    async def scenario() -> None:
        async with OpcuaWire(address, site.units, "control-system") as wire, listening(source) as heard:

            async def send(n: int, value: float | None, quality: SampleQuality) -> None:
                before = len(heard.readings)
                await wire.write([Sample(tag=tag, time=start + n, value=value, quality=quality)])
                await until(lambda: len(heard.readings) > before, f"reading {n}")

            await until(lambda: heard.source.status().state is LinkState.UP, "up")
            await until(lambda: heard.readings, "the server's first word")
            assert {r.quality for r in heard.readings} == {Quality.BAD}  # nothing sampled yet
            heard.readings.clear()
            await send(0, 30.5, SampleQuality.GOOD)
            await send(1, 31.5, SampleQuality.UNCERTAIN)
            await send(2, 31.5, SampleQuality.BAD)  # the last value, which must not be taken for one
            await send(3, None, SampleQuality.BAD)
            told = [(r.source_time, r.value, r.quality) for r in heard.readings]
            assert told == [
                (start, 30.5, Quality.GOOD),
                (start + 1, 31.5, Quality.UNCERTAIN),
                (start + 2, None, Quality.BAD),
                (start + 3, None, Quality.BAD),
            ]
            await wire.cut()
            await until(lambda: heard.source.status().state is not LinkState.UP, "the loss is noticed")
            kept = [Sample(tag=tag, time=start + n, value=32.0, historical=True) for n in (4, 5)]
            await wire.restore()
            await until(lambda: heard.source.status().state is LinkState.UP, "up again", 40.0)
            heard.readings.clear()
            await wire.write([*kept, replace(kept[0], time=start + 6, value=33.5, historical=False)])
            await until(lambda: heard.readings, "the present")
            # what the link kept stands in the server's history alone; it is never taken for the present
            assert [(r.source_time, r.value) for r in heard.readings] == [(start + 6, 33.5)]

    asyncio.run(scenario())
