"""The application on the server that it is served by, for tests that talk to it over loopback."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager

import waitress
from flask import Flask


@contextmanager
def serving(app: Flask) -> Iterator[str]:
    """Serve an application on a free port of this machine; its address."""
    server = waitress.create_server(app, host="127.0.0.1", port=0, threads=6)
    thread = threading.Thread(target=server.run, daemon=True)
    thread.start()
    yield f"http://127.0.0.1:{server.effective_port}"
    server.close()
    thread.join(timeout=5)
