"""Turn DATABASE_URL into Django's DATABASES entry."""

from pathlib import Path
from typing import Any
from urllib.parse import unquote

from django.core.exceptions import ImproperlyConfigured

SQLITE_PRAGMAS = (
    "PRAGMA journal_mode=WAL;"
    "PRAGMA synchronous={synchronous};"
    # Without it INSERT OR REPLACE would walk past the triggers that keep the book append-only.
    "PRAGMA recursive_triggers=ON;"
)


# A request does not wait longer than this for a row that somebody sits on.
POSTGRESQL_PATIENCE = "-c lock_timeout=3000"

# What Django and psycopg read and libpq does not know: values go beside the text of a statement,
# and the server plans a text that comes again only once.
OWN_OPTIONS = {"server_side_binding": True, "prepare_threshold": 3}


def database_from_url(url: str, *, sqlite_synchronous: str = "FULL") -> dict[str, Any]:
    """Return the settings for `sqlite:///path` or a libpq `postgresql://` address."""
    if url.startswith("sqlite:///"):
        return _sqlite(Path(unquote(url.removeprefix("sqlite:///"))), sqlite_synchronous)
    if url.startswith(("postgresql://", "postgres://")):
        return _postgresql(url)
    raise ImproperlyConfigured(
        "DATABASE_URL must start with sqlite:/// or postgresql://; leave it out to use SQLite "
        "in the folder var/."
    )


def _sqlite(path: Path, synchronous: str) -> dict[str, Any]:
    return {
        "ENGINE": "django.db.backends.sqlite3",
        "NAME": str(path),
        "OPTIONS": {
            # A read that turns into a write fails at once under the default mode,
            # whatever the time-out says; IMMEDIATE waits for its turn.
            "transaction_mode": "IMMEDIATE",
            "timeout": 20,
            "init_command": SQLITE_PRAGMAS.format(synchronous=synchronous),
        },
    }


def _postgresql(url: str) -> dict[str, Any]:
    # psycopg reads the address the way libpq does, sockets and percent signs included.
    from psycopg.conninfo import conninfo_to_dict

    parts = dict(conninfo_to_dict(url))
    # A host that is away must not hold a request, or the health answer, for minutes.
    parts.setdefault("connect_timeout", "5")
    server_options = f"{parts.pop('options', '')} {POSTGRESQL_PATIENCE}".strip()
    return {
        "ENGINE": "django.db.backends.postgresql",
        "NAME": parts.pop("dbname", "labplan"),
        "USER": parts.pop("user", ""),
        "PASSWORD": parts.pop("password", ""),
        "HOST": parts.pop("host", ""),
        "PORT": str(parts.pop("port", "")),
        "CONN_MAX_AGE": 60,
        "CONN_HEALTH_CHECKS": True,
        "OPTIONS": {**OWN_OPTIONS, **parts, "options": server_options},
    }
