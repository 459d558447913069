"""Serving: what every answer carries, what clients may keep, the access log, and a stop that loses nothing."""

import gzip
import hashlib
import json
import signal
import sys
import threading
import time
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path
from typing import IO, Any

from flask import Flask, Response, g, request

from pinlight.errors import CatalogueError, InputError, PinlightError
from pinlight.faces.frame import page_policy
from pinlight.faces.service import service
from pinlight.version import __version__

__all__ = ["prepare_answers", "serve_app"]

# Answers that the catalogue's state and their address decide alone.
_REPEATABLE = (
    "/api/v1/rankings",
    "/api/v1/stars",
    "/api/v1/arrays",
    "/api/v1/editions",
    "/view",
    "/vo/",
    "/suggest",
)
_PACKED = (
    "text/",
    "application/json",
    "application/problem+json",
    "application/x-votable",
    "application/x-ecsv",
)
_WORTH_PACKING = 600
_LARGEST_BODY = 64_000_000
_LARGEST_HEADER = 65_536
_GRACE_S = 15.0
_HEADERS = {
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
    "Referrer-Policy": "no-referrer",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), geolocation=(), microphone=()",
}


def prepare_answers(app: Flask) -> None:
    """Let every answer be told apart by the edition, packed, and carry the security headers."""
    app.before_request(_unchanged)
    app.after_request(_tagged)
    app.after_request(_packed)
    app.after_request(_secured)


def _secured(response: Response) -> Response:
    response.headers.setdefault("Content-Security-Policy", page_policy())
    for name, value in _HEADERS.items():
        response.headers.setdefault(name, value)
    return response


def _unchanged() -> Response | None:
    """304 where the client has this answer already, before anything is worked out."""
    g.tag = None
    if request.method not in ("GET", "HEAD") or not request.path.startswith(_REPEATABLE):
        return None
    known = service()
    try:
        revision = known.catalogue.revision()
    except CatalogueError:
        return None  # the answer itself will say so
    arrays = repr(sorted(known.arrays.items()))
    state = "\n".join([__version__, revision, arrays, request.full_path])
    g.tag = hashlib.sha256(state.encode("utf-8", "surrogatepass")).hexdigest()[:24]
    if request.if_none_match.contains_weak(g.tag):
        return Response(status=304)
    return None


def _tagged(response: Response) -> Response:
    if g.get("tag") and response.status_code in (200, 304):
        response.set_etag(g.tag, weak=True)
        response.headers["Cache-Control"] = "private, no-cache"
    else:
        response.headers.setdefault("Cache-Control", "no-store")
    return response


def _packed(response: Response) -> Response:
    """Compressed, where the client reads it and it is worth it."""
    kind = response.content_type or ""
    if not kind.startswith(_PACKED) or response.status_code in (206, 304):
        return response
    response.vary.add("Accept-Encoding")
    if not request.accept_encodings.quality("gzip") or response.headers.get("Content-Encoding"):
        return response
    response.direct_passthrough = False
    body = response.get_data()
    if len(body) >= _WORTH_PACKING:
        lasting = "immutable" in response.headers.get("Cache-Control", "")
        response.set_data(_pack_once(body) if lasting else gzip.compress(body, 5, mtime=0))
        response.headers["Content-Encoding"] = "gzip"
    return response


@lru_cache(maxsize=8)
def _pack_once(body: bytes) -> bytes:
    return gzip.compress(body, 9, mtime=0)


def _log_to(app: Flask, log: IO[str]) -> None:
    """Write a line of JSON for every request: when, who, what, how long."""
    lock = threading.Lock()

    @app.before_request
    def _begin() -> None:
        g.begun = time.perf_counter()

    @app.after_request
    def _line(response: Response) -> Response:
        line = {
            "time": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()),
            "client": request.remote_addr,
            "method": request.method,
            "path": request.path,
            "query": request.query_string.decode("utf-8", "replace"),
            "status": response.status_code,
            "bytes": response.calculate_content_length(),
            "milliseconds": round(1000 * (time.perf_counter() - g.get("begun", time.perf_counter())), 1),
            "agent": (request.user_agent.string or "")[:200],
        }
        with lock:
            log.write(json.dumps(line, ensure_ascii=True) + "\n")
            log.flush()
        return response


def serve_app(
    app: Flask,
    host: str,
    port: int,
    *,
    threads: int = 8,
    access_log: Path | None = None,
    ready: Callable[[str], object] = str,
) -> None:
    """Serve an application until a signal says to stop; answers under way are then finished.

    Parameters
    ----------
    app : Flask
    host, port, threads
        Port 0 takes one that is free.
    access_log : path, optional
        One line of JSON a request is added to it; ``-`` is standard error.
    ready : function
        Called with the address when connections are taken.

    Raises
    ------
    InputError
        If the address cannot be had.
    PinlightError
        If the log cannot be written.
    """
    import waitress
    from waitress import wasyncore

    if access_log is not None:
        try:
            log = sys.stderr if str(access_log) == "-" else access_log.open("a", encoding="utf-8")
        except OSError as error:
            raise PinlightError(f"cannot write {access_log}: {error.strerror}") from error
        _log_to(app, log)
    sockets: dict[int, Any] = {}
    try:
        server = waitress.create_server(
            app,
            host=host,
            port=port,
            threads=threads,
            ident="pinlight",
            map=sockets,
            max_request_body_size=_LARGEST_BODY,
            max_request_header_size=_LARGEST_HEADER,
            channel_timeout=60,
            connection_limit=400,
        )
    except (OSError, ValueError) as error:
        reason = f"cannot serve on {host} port {port}: {getattr(error, 'strerror', None) or error}"
        raise InputError(f"{reason}; choose another --port") from error
    stopping: threading.Event = app.extensions["pinlight_stopping"]
    if threading.current_thread() is threading.main_thread():
        for name in (signal.SIGTERM, signal.SIGINT):
            signal.signal(name, lambda *_: stopping.set())
    listeners = [one for one in sockets.values() if getattr(one, "accepting", False)]
    taken = listeners[0].effective_port
    ready(f"http://{f'[{host}]' if ':' in host else host}:{taken}/")
    while not stopping.is_set():
        wasyncore.loop(timeout=0.5, map=sockets, count=1)
    for listener in listeners:
        wasyncore.dispatcher.close(listener)
    end = time.monotonic() + _GRACE_S
    while time.monotonic() < end and any(map(_busy, list(sockets.values()))):
        wasyncore.loop(timeout=0.1, map=sockets, count=1)
    server.task_dispatcher.shutdown(timeout=1)
    for one in list(sockets.values()):
        one.close()


def _busy(channel: Any) -> bool:
    """Whether a connection has a question in hand or an answer to send."""
    return bool(getattr(channel, "requests", None)) or bool(getattr(channel, "total_outbufs_len", 0))
