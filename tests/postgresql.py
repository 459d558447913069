"""A PostgreSQL server of the tests' own, from Debian's binaries, in a temporary folder on loopback."""

import os
import pwd
import shutil
import signal
import socket
import subprocess
import tempfile
import time
from pathlib import Path

import psycopg

__all__ = ["Server", "binaries", "start"]


def binaries() -> Path | None:
    """The folder of initdb and postgres: the newest of Debian's, or where PATH has them."""
    debian = Path("/usr/lib/postgresql")
    folders = [place.parent for place in debian.glob("*/bin/initdb")] if debian.is_dir() else []
    if folders:
        return max(folders, key=lambda folder: float(folder.parent.name))
    found = shutil.which("initdb")
    return Path(found).resolve().parent if found else None


class Server:
    """A running server; `url(database)` is what a catalogue is opened by."""

    def __init__(self, process: subprocess.Popen[bytes], folder: Path, port: int) -> None:
        self._process, self.folder, self.port = process, folder, port
        self._count = 0

    def url(self, database: str) -> str:
        return f"postgresql+psycopg://pinlight@127.0.0.1:{self.port}/{database}"

    def execute(self, statement: str, database: str = "postgres") -> None:
        with psycopg.connect(
            host="127.0.0.1", port=self.port, user="pinlight", dbname=database, autocommit=True
        ) as connection:
            connection.execute(statement)  # type: ignore[call-overload]

    def new_database(self, template: str = "template0") -> str:
        """The URL of a new database, a copy of `template`."""
        self._count += 1
        name = f"test{os.getpid()}_{self._count}"
        self.execute(f"CREATE DATABASE {name} TEMPLATE {template} ENCODING 'UTF8'")
        return self.url(name)

    def drop(self, url: str) -> None:
        """Remove a database that `new_database` made."""
        self.execute(f"DROP DATABASE {url.rpartition('/')[2]} WITH (FORCE)")

    def stop(self) -> None:
        """End the server, by its process."""
        self._process.send_signal(signal.SIGQUIT)  # at once: the data are thrown away
        self._process.wait(30)
        shutil.rmtree(self.folder, ignore_errors=True)


def start() -> Server:
    """Start a server as a user without privileges; durability is off, the data are thrown away."""
    folder = binaries()
    assert folder is not None
    place = Path(tempfile.mkdtemp(prefix="pg", dir="/tmp" if Path("/tmp").is_dir() else None))
    # PostgreSQL refuses to run as root.
    as_user = {}
    if os.geteuid() == 0:
        user = pwd.getpwnam("postgres" if "postgres" in {u.pw_name for u in pwd.getpwall()} else "nobody")
        os.chown(place, user.pw_uid, user.pw_gid)
        as_user = {"user": user.pw_uid, "group": user.pw_gid, "extra_groups": []}
    data = place / "data"
    subprocess.run(
        [folder / "initdb", "-D", data, "-U", "pinlight", "-A", "trust", "-E", "UTF8", "--locale=C", "-N"],
        check=True, stdout=subprocess.DEVNULL, cwd=place, **as_user,
    )  # fmt: skip
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    settings = {
        "listen_addresses": "127.0.0.1", "port": port, "unix_socket_directories": place, "fsync": "off",
        "synchronous_commit": "off", "full_page_writes": "off", "autovacuum": "off", "max_connections": 100,
    }  # fmt: skip
    arguments = [word for key, value in settings.items() for word in ("-c", f"{key}={value}")]
    log = (place / "log").open("wb")
    process = subprocess.Popen([folder / "postgres", "-D", data, *arguments], stdout=log, stderr=log, cwd=place, **as_user)  # fmt: skip
    log.close()
    server = Server(process, place, port)
    for _ in range(300):
        try:
            server.execute("SELECT 1")
        except psycopg.OperationalError:
            if process.poll() is not None:
                raise RuntimeError((place / "log").read_text(errors="replace")) from None
            time.sleep(0.1)
        else:
            return server
    server.stop()
    raise RuntimeError("the server did not answer within 30 s")
