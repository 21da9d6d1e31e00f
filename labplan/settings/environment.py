"""Check what the environment says; refuse nonsense at start, not in a request."""

import os
import re
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
    return whole_number(variable, default, highest=86_400)


def whole_number(variable: str, default: int, *, highest: int) -> int:
    """Return the whole number that an environment variable gives, from 1 to the highest."""
    given = os.environ.get(variable) or str(default)
    if not given.isdecimal() or not 1 <= int(given) <= highest:
        raise ImproperlyConfigured(f"{variable}={given!r}: give a whole number, 1 to {highest}.")
    return int(given)


def one_of_words(variable: str, words: tuple[str, ...]) -> str:
    """Return the word that an environment variable gives; the first one when it gives none."""
    given = os.environ.get(variable) or words[0]
    if given not in words:
        raise ImproperlyConfigured(f"{variable}={given!r}: give one of {', '.join(words)}.")
    return given


def broker_address() -> str:
    """Return REDIS_URL; empty when it is not set."""
    given = os.environ.get("REDIS_URL") or ""
    if given and not re.fullmatch(r"(redis|rediss|redis\+socket|unix)://\S+", given):
        raise ImproperlyConfigured(
            "REDIS_URL must look like redis://host:6379/0 or redis+socket:///path/of/the.sock."
        )
    return given


def host_names(default: str) -> list[str]:
    """Return the names that LABPLAN_HOSTS lists; a name alone, without port or spaces."""
    names = [name.strip() for name in (os.environ.get("LABPLAN_HOSTS") or default).split(",")]
    for name in names:
        if not re.fullmatch(r"\.?[A-Za-z0-9][A-Za-z0-9.-]*|\[[0-9a-fA-F:.]+\]", name):
            raise ImproperlyConfigured(
                f"LABPLAN_HOSTS: {name!r} is no host name; give names with commas between them."
            )
    return names
