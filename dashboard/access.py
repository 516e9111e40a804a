"""Who may ask what: loopback names only, own pages only, JSON only, and the headers that keep it so.

A page of another site must not be able to read or write here, even when it points a name of its own at
this machine. There are no accounts yet, so nothing but loopback is served.
"""

from collections.abc import Sequence
from ipaddress import ip_address
from typing import Final

from flask import Flask, Response, jsonify, request

from dashboard.errors import NotLoopbackError

LOOPBACK_NAMES: Final = frozenset({"localhost", "127.0.0.1", "[::1]"})
LARGEST_BODY_BYTES: Final = 64 * 1024
_READS: Final = frozenset({"GET", "HEAD"})
_SAFE_FETCH: Final = "same-origin"


def check_loopback(host: str) -> None:
    """Refuse an address that others could reach.

    Raises
    ------
    NotLoopbackError
        The address is not one of this machine's loopback addresses.
    """
    if host == "localhost":
        return
    try:
        loopback = ip_address(host.strip("[]")).is_loopback
    except ValueError:
        loopback = False
    if not loopback:
        raise NotLoopbackError(host)


def content_security_policy(script_hashes: Sequence[str]) -> str:
    """The policy under which every page runs.

    Styles may stand in attributes, because the chart library sets them: without that the limit lines of a
    chart are drawn in the wrong place. Scripts may not.
    """
    rules = (
        ("default-src", "'self'"),
        ("script-src", " ".join(("'self'", *script_hashes))),
        ("style-src", "'self' 'unsafe-inline'"),
        ("img-src", "'self' data: blob:"),
        ("font-src", "'self'"),
        ("connect-src", "'self'"),
        ("worker-src", "'self' blob:"),
        ("object-src", "'none'"),
        ("base-uri", "'none'"),
        ("frame-ancestors", "'none'"),
        ("form-action", "'self'"),
    )
    return "; ".join(f"{name} {value}" for name, value in rules)


def denied(status: int, reason: str) -> Response:
    """One shape for every refusal."""
    response = jsonify(error=reason)
    response.status_code = status
    return response


def _host_name(host: str) -> str:
    """The name without its port; a bracketed IPv6 address keeps its brackets."""
    if host.startswith("["):
        return host.partition("]")[0] + "]"
    return host.partition(":")[0].lower()


def _refuse_host() -> Response | None:
    if _host_name(request.headers.get("Host", "")) in LOOPBACK_NAMES:
        return None
    return denied(403, "This page answers only to the names of this machine.")


def _refuse_post() -> Response | None:
    fetch_site, origin = request.headers.get("Sec-Fetch-Site"), request.headers.get("Origin")
    if fetch_site is None and origin is None:
        return denied(403, "A request that does not say where it comes from is refused.")
    if fetch_site is not None and fetch_site != _SAFE_FETCH:
        return denied(403, "Only this site's own pages may ask for changes.")
    if origin is not None and origin != f"{request.scheme}://{request.host}":
        return denied(403, "Only this site's own pages may ask for changes.")
    if request.mimetype != "application/json":
        return denied(415, "Only JSON is read.")
    return None


def _guard() -> Response | None:
    refusal = _refuse_host()
    if refusal is not None or request.method in _READS:
        return refusal
    if request.method != "POST":
        return denied(405, "Only GET, HEAD and POST are answered.")
    return _refuse_post()


def install(server: Flask, *, script_hashes: Sequence[str]) -> None:
    """Put the guard before, and the headers behind, every answer of the server."""
    headers = {
        "Content-Security-Policy": content_security_policy(script_hashes),
        "X-Content-Type-Options": "nosniff",
        "X-Frame-Options": "DENY",
        "Referrer-Policy": "same-origin",
        "Cross-Origin-Opener-Policy": "same-origin",
        "Cross-Origin-Resource-Policy": "same-origin",
        "Permissions-Policy": "camera=(), geolocation=(), microphone=(), payment=(), usb=()",
    }
    server.config["MAX_CONTENT_LENGTH"] = LARGEST_BODY_BYTES
    # First in the line: nothing may answer, not even a cached file, before the guard has looked.
    server.before_request_funcs.setdefault(None, []).insert(0, _guard)

    @server.after_request
    def add_headers(response: Response) -> Response:
        for name, value in headers.items():
            response.headers[name] = value
        response.headers.setdefault("Cache-Control", "no-store")
        return response
