"""A PostgreSQL server of the tests' own: a folder, a socket in it, nothing on the network."""

from __future__ import annotations

import contextlib
import os
import pwd
import shutil
import signal
import subprocess
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from urllib.parse import quote

PLACES = ("/usr/lib/postgresql/*/bin", "/usr/pgsql-*/bin", "/opt/homebrew/opt/postgresql*/bin")
LOCKED, PASSWORD = "locked", "h&sh 9/?"  # a role that has to say its password
PATIENCE = 60.0


class NoServerError(Exception):
    """PostgreSQL is not installed here."""


def binaries() -> Path:
    """The folder of PostgreSQL's programs, the newest of those there are."""
    on_path = shutil.which("initdb")
    if on_path:
        return Path(on_path).resolve().parent
    found = [p for place in PLACES for p in Path("/").glob(place[1:]) if (p / "initdb").exists()]
    if not found:
        raise NoServerError(
            "No PostgreSQL server here: install it (Debian: apt install postgresql)."
        )
    return max(found, key=lambda p: [int(x) if x.isdigit() else 0 for x in p.parts])


class Server:
    """A server that can be killed and started again on the same data."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.programs = binaries()
        # a server refuses to run as root
        self.user = _other_user() if os.geteuid() == 0 else None
        if self.user:
            shutil.chown(folder, self.user)
        self.process: subprocess.Popen[bytes] | None = None
        self._run("initdb", "-D", str(self.data), "-U", "owner", "--auth=trust", "-E", "UTF8",
                  "--no-locale", "--no-instructions")  # fmt: skip
        self._configure()

    @property
    def data(self) -> Path:
        return self.folder / "data"

    def url(self, database: str = "postgres", user: str = "owner", password: str = "") -> str:
        account = user + (f":{quote(password, safe='')}" if password else "")
        return f"postgresql://{account}@/{database}?host={quote(str(self.folder), safe='')}"

    def _run(self, program: str, *args: str) -> None:
        subprocess.run([self.programs / program, *args], user=self.user, check=True,
                       cwd=self.folder, stdout=subprocess.DEVNULL)  # fmt: skip

    def _configure(self) -> None:
        # fsync stays on: what is tested is that nothing acknowledged is lost
        settings = f"listen_addresses = ''\nunix_socket_directories = '{self.folder}'\n"
        settings += "max_connections = 20\nshared_buffers = 16MB\nmax_wal_size = 64MB\n"
        (self.data / "postgresql.auto.conf").write_text(settings)
        rules = f"local all {LOCKED} scram-sha-256\nlocal all all trust\n"
        (self.data / "pg_hba.conf").write_text(rules)

    def start(self) -> None:
        """Start it, and wait until it takes connections."""
        log = (self.folder / "log").open("ab")
        self.process = subprocess.Popen(
            [self.programs / "postgres", "-D", str(self.data)],
            user=self.user, cwd=self.folder, stdout=log, stderr=log,
        )  # fmt: skip
        log.close()
        until = time.monotonic() + PATIENCE
        while not self.is_ready():
            if self.process.poll() is not None or time.monotonic() > until:
                raise RuntimeError((self.folder / "log").read_text()[-2000:])
            time.sleep(0.02)

    def is_ready(self) -> bool:
        ready = [self.programs / "pg_isready", "-q", "-h", str(self.folder), "-U", "owner"]
        return subprocess.run(ready, check=False).returncode == 0

    def stop(self) -> None:
        """Stop it as an administrator would who does not wait for clients."""
        if self.process is not None and self.process.poll() is None:
            self.process.send_signal(signal.SIGINT)
            self.process.wait(PATIENCE)
        self.process = None

    def kill(self) -> int:
        """SIGKILL to all of it at once, as a lost machine; returns how many processes it had."""
        assert self.process is not None
        everyone = [self.process.pid, *_children(self.process.pid)]
        for pid in everyone:
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, signal.SIGKILL)
        self.process.wait(PATIENCE)
        for pid in everyone[1:]:  # they are somebody else's to reap, but hold the shared memory
            while Path(f"/proc/{pid}").exists() and not _is_dead(pid):
                time.sleep(0.005)
        self.process = None
        return len(everyone)


def _other_user() -> str:
    for name in ("postgres", "nobody"):
        with contextlib.suppress(KeyError):
            return pwd.getpwnam(name).pw_name
    raise NoServerError("No user to run PostgreSQL as: it refuses to run as root.")


def _children(parent: int) -> list[int]:
    """The processes a process has started, from /proc."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        with contextlib.suppress(OSError):
            after_name = stat.read_text().rpartition(")")[2].split()
            if int(after_name[1]) == parent:
                found.append(int(stat.parent.name))
    return found


def _is_dead(pid: int) -> bool:
    with contextlib.suppress(OSError):
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] in "ZX"
    return True


@contextlib.contextmanager
def running() -> Iterator[Server]:
    """A new server, gone at the end."""
    with tempfile.TemporaryDirectory(prefix="pg-", dir="/tmp") as name:  # short: it names a socket
        server = Server(Path(name))
        server.start()
        try:
            yield server
        finally:
            server.stop()
