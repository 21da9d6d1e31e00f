"""Keep one random key per installation."""

import os
import secrets
import tempfile
from pathlib import Path

from django.core.exceptions import ImproperlyConfigured

SHORTEST_SEAL_KEY = 32


def read_or_make_secret_key(folder: Path, name: str = "secret-key") -> str:
    """Return a key kept in `folder`, making it on first use, readable by its owner only."""
    path = folder / name
    if not path.exists():
        try:
            folder.mkdir(mode=0o700, parents=True, exist_ok=True)
            # Written apart and then linked: a second process never reads half a key.
            handle, draft = tempfile.mkstemp(dir=folder)
        except OSError as error:
            raise ImproperlyConfigured(
                f"{folder} cannot be written: set LABPLAN_DATA_DIR to a folder of yours."
            ) from error
        with os.fdopen(handle, "w") as file:
            file.write(secrets.token_urlsafe(48))
        try:
            os.link(draft, path)
        except FileExistsError:
            pass
        finally:
            os.unlink(draft)
    return path.read_text().strip()


def read_seal_key(folder: Path) -> str:
    """Return LABPLAN_SEAL_KEY, else the key kept in `folder`; refuse what could be guessed."""
    key = os.environ.get("LABPLAN_SEAL_KEY") or read_or_make_secret_key(folder, "seal-key")
    if len(key) < SHORTEST_SEAL_KEY:
        raise ImproperlyConfigured(
            f"The key of the seals has {len(key)} characters: give at least {SHORTEST_SEAL_KEY} "
            "random ones in LABPLAN_SEAL_KEY or the file seal-key."
        )
    return key
