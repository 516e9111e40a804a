"""Serving the pages: one process, loopback only."""

import logging
import signal
import sys
from pathlib import Path
from types import FrameType

from waitress import create_server

from agent.siteplan.load import load_site
from dashboard.access import check_loopback
from dashboard.app import create_app, feed_of
from dashboard.errors import NotLoopbackError, PortTakenError, ServeError

__all__ = ["NotLoopbackError", "PortTakenError", "ServeError", "run"]

_THREADS = 16  # twenty viewers ask at about the same moment of each second


def run(site_path: Path, data: Path, host: str = "127.0.0.1", port: int = 8050) -> None:
    """Serve until SIGINT or SIGTERM; port 0 takes a free one.

    Raises
    ------
    NotLoopbackError, PortTakenError
        The address cannot be served.
    SiteFileError
        The site file has faults.
    """
    check_loopback(host)
    logging.basicConfig(
        level=logging.WARNING, format="%(levelname)s %(name)s: %(message)s", stream=sys.stderr
    )
    app = create_app(site=load_site(site_path), data=data)
    try:
        server = create_server(
            app.server,
            host=host.strip("[]"),
            port=port,
            threads=_THREADS,
            ident=None,
            clear_untrusted_proxy_headers=True,
        )
    except OSError as error:
        raise PortTakenError(host, port, error) from error
    feed = feed_of(app)
    feed.start()
    signal.signal(signal.SIGTERM, _stop)
    shown = f"[{host.strip('[]')}]" if ":" in host else host
    print(f"throwline dashboard: http://{shown}:{_port_of(server, port)}/", file=sys.stderr, flush=True)  # noqa: T201
    try:
        server.run()
    except (KeyboardInterrupt, SystemExit):
        pass
    finally:
        server.close()
        feed.close()


def _port_of(server: object, port: int) -> int:
    effective = getattr(server, "effective_port", None)  # one socket
    if effective is None:  # localhost may be two sockets, IPv4 and IPv6
        listening = getattr(server, "effective_listen", None) or [(None, port)]
        effective = listening[0][1]
    return int(effective)


def _stop(_signal: int, _frame: FrameType | None) -> None:
    raise SystemExit(0)
