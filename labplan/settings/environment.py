"""Check what the environment says; refuse nonsense at start, not in a request."""

import os
from zoneinfo import ZoneInfo

from django.core.exceptions import ImproperlyConfigured


def known_time_zone(name: str) -> str:
    """Return the name of a time zone there is; refuse another at start, not in a request."""
    try:
        ZoneInfo(name)
    except (KeyError, ValueError, OSError) as error:
        raise ImproperlyConfigured(
            f"LABPLAN_TIME_ZONE={name!r} is no time zone; give one like Europe/Berlin."
        ) from error
    return name


def whole_seconds(variable: str, default: int) -> int:
    """Return the seconds that an environment variable gives, 1 to 86,400."""
    given = os.environ.get(variable) or str(default)
    if not given.isdecimal() or not 1 <= int(given) <= 86_400:
        raise ImproperlyConfigured(f"{variable}={given!r}: give whole seconds, 1 to 86400.")
    return int(given)


def one_of_words(variable: str, words: tuple[str, ...]) -> str:
    """Return the word that an environment variable gives; the first one when it gives none."""
    given = os.environ.get(variable) or words[0]
    if given not in words:
        raise ImproperlyConfigured(f"{variable}={given!r}: give one of {', '.join(words)}.")
    return given
