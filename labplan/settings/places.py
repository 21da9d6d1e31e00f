"""Check what the environment says of where and when the laboratory is."""

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
