"""The application on the server that it is served by, for tests that talk to it over loopback."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from queue import Queue

from flask import Flask

from pinlight.faces.serving import serve_app


@contextmanager
def serving(app: Flask) -> Iterator[str]:
    """Serve an application on a free port of this machine; its address."""
    addresses: Queue[str] = Queue()
    thread = threading.Thread(
        target=serve_app, args=(app, "127.0.0.1", 0), kwargs={"ready": addresses.put}, daemon=True
    )
    thread.start()
    yield addresses.get(timeout=10).rstrip("/")
    app.extensions["pinlight_stopping"].set()
    thread.join(timeout=30)
    assert not thread.is_alive()
