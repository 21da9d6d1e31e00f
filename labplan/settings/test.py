"""Settings for the tests: the same code on a throw-away database."""

import atexit
import os
import shutil
import tempfile
from pathlib import Path

os.environ.setdefault("LABPLAN_SECRET_KEY", "for-tests-only")
os.environ.setdefault("LABPLAN_SEAL_KEY", "for-tests-only-and-as-long-as-a-real-one")

from labplan.settings.database import database_from_url
from labplan.settings.default import *  # noqa: F403

ALLOWED_HOSTS = ["testserver", "127.0.0.1", "localhost"]


def _folder_for_this_process() -> Path:
    """A new folder, removed at exit with all SQLite leaves in it; a forked child leaves it be."""
    folder, maker = tempfile.mkdtemp(prefix="labplan-test-"), os.getpid()
    atexit.register(lambda: os.getpid() == maker and shutil.rmtree(folder, ignore_errors=True))
    return Path(folder)


def _database_url() -> str:
    # A file and not memory: some tests look at the database from several processes.
    given = os.environ.get("DATABASE_URL")
    return given or f"sqlite:///{_folder_for_this_process() / 'labplan.sqlite3'}"


DATABASES = {"default": database_from_url(_database_url(), sqlite_synchronous="OFF")}
if "sqlite3" in DATABASES["default"]["ENGINE"]:
    DATABASES["default"]["TEST"] = {"NAME": DATABASES["default"]["NAME"]}
PASSWORD_HASHERS = ["django.contrib.auth.hashers.MD5PasswordHasher"]
LAB_TIME_ZONE = "Europe/Berlin"
LOGGING = {"version": 1, "disable_existing_loggers": False}
