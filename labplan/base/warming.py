"""Use every slow part once before it is needed: each app registers what that is for it."""

from collections.abc import Callable

_warmers: list[Callable[[], None]] = []


def warms_up(warm: Callable[[], None]) -> Callable[[], None]:
    """Register a function that needs no database; it raises when the app cannot do its work."""
    _warmers.append(warm)
    return warm


def warm_up() -> None:
    for warm in _warmers:
        warm()
