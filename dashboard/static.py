"""Scripts and styles, compressed once and kept in memory.

The chart library alone is 4.8 MB; compressing it on every request costs a fifth of a second each time.
"""

import gzip
import threading
from dataclasses import dataclass
from typing import Final

from flask import Flask, Response, request

PREFIXES: Final = ("/_dash-component-suites/", "/assets/")
_TEXT_TYPES: Final = ("javascript", "css", "svg", "json")
_SMALLEST_WORTH_BYTES: Final = 500


@dataclass(frozen=True, slots=True, kw_only=True)
class _Packed:
    body: bytes
    content_type: str
    cache_control: str


def _accepts_gzip() -> bool:
    return "gzip" in request.headers.get("Accept-Encoding", "").lower()


class CompressedFiles:
    """Remembers the compressed body of each static file that was ever asked for."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._packed: dict[str, _Packed] = {}

    def install(self, server: Flask) -> None:
        server.before_request(self._answer)
        server.after_request(self._pack)

    def _key(self) -> str:
        return f"{request.path}?{request.query_string.decode('ascii', 'replace')}"

    def _answer(self) -> Response | None:
        if request.method != "GET" or not request.path.startswith(PREFIXES) or not _accepts_gzip():
            return None
        packed = self._packed.get(self._key())
        return None if packed is None else _response(packed)

    def _pack(self, response: Response) -> Response:
        if not self._worth_packing(response):
            return response
        response.direct_passthrough = False
        body = response.get_data()
        response.close()  # the file behind it
        if len(body) < _SMALLEST_WORTH_BYTES:
            return _plain(body, response)
        packed = _Packed(
            body=gzip.compress(body, compresslevel=9, mtime=0),
            content_type=response.headers["Content-Type"],
            cache_control=_cache_control(response),
        )
        with self._lock:
            self._packed[self._key()] = packed
        return _response(packed)

    def _worth_packing(self, response: Response) -> bool:
        return (
            request.method == "GET"
            and request.path.startswith(PREFIXES)
            and response.status_code == 200
            and "Content-Encoding" not in response.headers
            and any(t in (response.mimetype or "") for t in _TEXT_TYPES)
            and _accepts_gzip()
            # A query nobody here writes would fill the memory with copies.
            and (not request.query_string or request.args.keys() <= {"m", "v"})
            and len(self._packed) < 200
        )


def _plain(body: bytes, response: Response) -> Response:
    return Response(body, status=response.status_code, headers=response.headers)


def _cache_control(response: Response) -> str:
    """A file whose address changes with its content may be kept for a year; others are asked for again."""
    own = response.headers.get("Cache-Control", "")
    if "max-age" in own:
        return own
    return "max-age=31536000" if request.args.get("m") or request.args.get("v") else "no-cache"


def _response(packed: _Packed) -> Response:
    response = Response(packed.body, content_type=packed.content_type)
    response.headers["Content-Encoding"] = "gzip"
    response.headers["Cache-Control"] = packed.cache_control
    response.headers["Vary"] = "Accept-Encoding"
    return response
