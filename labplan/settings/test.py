"""Settings for the tests: the same code on a throw-away database."""

import os
import tempfile
from pathlib import Path

os.environ.setdefault("LABPLAN_SECRET_KEY", "for-tests-only")

from labplan.settings.database import database_from_url
from labplan.settings.default import *  # noqa: F403

ALLOWED_HOSTS = ["testserver", "127.0.0.1", "localhost"]
# A file and not memory: some tests look at the database from several processes.
_SQLITE_FILE = Path(tempfile.gettempdir()) / f"labplan-test-{os.getpid()}.sqlite3"
DATABASES = {
    "default": database_from_url(
        os.environ.get("DATABASE_URL") or f"sqlite:///{_SQLITE_FILE}",
        sqlite_synchronous="OFF",
    )
}
if "sqlite3" in DATABASES["default"]["ENGINE"]:
    DATABASES["default"]["TEST"] = {"NAME": DATABASES["default"]["NAME"]}
PASSWORD_HASHERS = ["django.contrib.auth.hashers.MD5PasswordHasher"]
LAB_TIME_ZONE = "Europe/Berlin"
LOGGING = {"version": 1, "disable_existing_loggers": False}
