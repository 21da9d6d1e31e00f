"""pg_dump and pg_restore: found, and run on labplan's database."""

import os
import shlex
import shutil
import subprocess
from collections.abc import Sequence
from pathlib import Path

from django.db.backends.base.base import BaseDatabaseWrapper
from psycopg.conninfo import make_conninfo

from labplan.operations.errors import OperationRefused, ProgramMissing
from labplan.settings.database import OWN_OPTIONS, POSTGRESQL_PATIENCE

FOLDER_VARIABLE = "LABPLAN_PG_BIN"
ERROR_LINES = 12


def address_of(database: BaseDatabaseWrapper) -> str:
    """The connection string of the database as it was given, without the password."""
    settings = database.settings_dict
    options = settings["OPTIONS"].get("options", "").removesuffix(POSTGRESQL_PATIENCE).strip()
    parts = {
        "dbname": settings["NAME"], "user": settings["USER"],
        "host": settings["HOST"], "port": settings["PORT"], **settings["OPTIONS"],
        "options": options,
    }  # fmt: skip
    return make_conninfo(**{n: v for n, v in parts.items() if v and n not in OWN_OPTIONS})


def find_program(name: str, command: Sequence[str]) -> str:
    """The program's path; ProgramMissing gives the command to run where there is one."""
    folder = os.environ.get(FOLDER_VARIABLE)
    found = shutil.which(name, path=folder) if folder else shutil.which(name)
    if found is None:
        where = f"in {folder} ({FOLDER_VARIABLE})" if folder else "on PATH"
        raise ProgramMissing(
            f"There is no {name} {where}. Install PostgreSQL's client programs of the server's "
            f"version, or set {FOLDER_VARIABLE} to their folder. Where they are, you can also run: "
            + shlex.join([name, *command])
        )
    return found


def run_program(name: str, command: Sequence[str], database: BaseDatabaseWrapper) -> str:
    """Run a program and return what it printed; OperationRefused with its words when it fails."""
    program = find_program(name, command)
    # Not on the command line, where everybody on the machine could read it.
    password = database.settings_dict["PASSWORD"]
    environment = {**os.environ, **({"PGPASSWORD": password} if password else {})}
    ended = subprocess.run(
        [program, *command],
        env=environment, stdin=subprocess.DEVNULL, capture_output=True, text=True, check=False,
    )  # fmt: skip
    if ended.returncode != 0:
        lines = ended.stderr.strip().splitlines()[-ERROR_LINES:]
        advice = (
            f"\nSet LABPLAN_PG_BIN to the folder of a {name} as new as the server."
            if any("version mismatch" in line for line in lines)
            else ""
        )
        raise OperationRefused(f"{name} failed:\n" + "\n".join(lines) + advice)
    return ended.stdout


def dump_command(address: str, path: Path, *, snapshot: str | None = None) -> list[str]:
    """The arguments of pg_dump."""
    held = [f"--snapshot={snapshot}"] if snapshot else []
    return [
        "--format=custom", "--no-owner", "--no-privileges", *held,
        f"--file={path}", f"--dbname={address}",
    ]  # fmt: skip
