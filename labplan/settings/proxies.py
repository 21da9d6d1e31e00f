"""How many proxies of our own stand before the web processes."""

import os

from django.core.exceptions import ImproperlyConfigured


def own_proxies() -> int:
    """Read LABPLAN_PROXIES; 0 believes no X-Forwarded-For."""
    given = os.environ.get("LABPLAN_PROXIES") or "0"
    if given not in {str(number) for number in range(10)}:
        raise ImproperlyConfigured(f"LABPLAN_PROXIES={given!r}: give a number from 0 to 9.")
    return int(given)
