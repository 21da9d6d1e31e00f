"""Keep one random key per installation."""

import os
import secrets
import tempfile
from pathlib import Path

from django.core.exceptions import ImproperlyConfigured


def read_or_make_secret_key(folder: Path) -> str:
    """Return the key kept in `folder`, making it on first use, readable by its owner only."""
    path = folder / "secret-key"
    if not path.exists():
        try:
            folder.mkdir(parents=True, exist_ok=True)
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
