"""A broker in a process of its own: `python amqtt_child.py PORT`; says "up" and runs until it is ended."""

import asyncio
import logging
import sys

from amqtt.broker import Broker


async def main(port: int) -> None:
    logging.disable(logging.CRITICAL)
    broker = Broker(
        {
            "listeners": {"default": {"type": "tcp", "bind": f"127.0.0.1:{port}"}},
            "plugins": {"amqtt.plugins.authentication.AnonymousAuthPlugin": {"allow_anonymous": True}},
        }
    )
    await broker.start()
    print("up", flush=True)
    await asyncio.Event().wait()


asyncio.run(main(int(sys.argv[1])))
