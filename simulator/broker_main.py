"""The embedded broker as a process: for demos and tests, on loopback, without accounts.

It speaks MQTT 3.1.1 and forgets the sessions of anonymous clients; a plant wants a real broker.
"""

import argparse
import asyncio
import logging
import sys
from collections.abc import Sequence

from simulator.stopping import stop_on_signals

MISSING = "the embedded broker is missing: install the extra with  pip install 'throwline[demo]'"


async def serve(port: int) -> None:
    """Serve until asked to end."""
    from amqtt.broker import Broker  # noqa: PLC0415 - an optional extra

    stop = stop_on_signals()
    config = {
        "listeners": {"default": {"type": "tcp", "bind": f"127.0.0.1:{port}"}},
        "plugins": {"amqtt.plugins.authentication.AnonymousAuthPlugin": {"allow_anonymous": True}},
    }
    broker = Broker(config)
    await broker.start()
    print("broker up", flush=True)  # noqa: T201 - the line its parent waits for
    await stop.wait()
    try:
        async with asyncio.timeout(1.0):
            await broker.shutdown()
    except TimeoutError:
        pass  # a client that does not hang up must not hold the broker


def main(argv: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(prog="python -m simulator.broker_main", description=__doc__)
    parser.add_argument("--port", type=int, required=True, help="port on 127.0.0.1")
    port = parser.parse_args(argv).port
    # A client that was killed is an everyday thing here; the library writes a traceback for each.
    logging.basicConfig(level=logging.CRITICAL)
    try:
        asyncio.run(serve(port))
    except ModuleNotFoundError as error:
        if error.name != "amqtt":
            raise
        print(f"broker: {MISSING}", file=sys.stderr)  # noqa: T201
        return 1
    except Exception as error:  # noqa: BLE001 - one sentence, whatever the library raises at start
        print(f"broker: {error}", file=sys.stderr)  # noqa: T201
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
