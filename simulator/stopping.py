"""Ending when asked: one event for SIGINT and SIGTERM, on systems with and without loop handlers."""

import asyncio
import signal


def stop_on_signals() -> asyncio.Event:
    """An event of the running loop, set by SIGINT or SIGTERM."""
    stop = asyncio.Event()
    loop = asyncio.get_running_loop()
    for number in (signal.SIGINT, signal.SIGTERM):
        try:
            loop.add_signal_handler(number, stop.set)
        except NotImplementedError:  # no such handlers on Windows
            signal.signal(number, lambda *_: loop.call_soon_threadsafe(stop.set))
    return stop
