"""Settings of `make demo`: an empty SQLite database of its own in out/, made anew each time."""

import os

os.environ.pop("DATABASE_URL", None)

from labplan.settings.database import database_from_url
from labplan.settings.default import *  # noqa: F403
from labplan.settings.default import BASE_DIR

IS_DEMO = True
OUT_DIR = BASE_DIR / "out"
DEMO_DATABASE = OUT_DIR / "demo.sqlite3"
DATABASES = {"default": database_from_url(f"sqlite:///{DEMO_DATABASE}")}
LAB_TIME_ZONE = "UTC"
LOGGING = {
    "version": 1,
    "disable_existing_loggers": False,
    "root": {"level": "ERROR"},
}
