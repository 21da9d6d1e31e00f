"""Use every slow part once before it is needed: each app registers what that is for it."""

import gc
import logging
import threading
import time
from collections.abc import Callable

from django.db import connections

logger = logging.getLogger(__name__)
# A failure may have been for want of memory: it is tried again, but not with every look.
TRY_AGAIN_AFTER_S = 60.0
_warmers: list[Callable[[], None]] = []
_lock = threading.Lock()
_is_warm = False
_failed_at = float("-inf")


def warms_up(warm: Callable[[], None]) -> Callable[[], None]:
    """Register a function that needs no database; it raises when the app cannot do its work."""
    _warmers.append(warm)
    return warm


def warm_up() -> None:
    """Use everything once, however often it is called; raises what a warmer raises."""
    global _is_warm  # noqa: PLW0603 - one process is warm or not
    if not _is_warm:
        for warm in _warmers:
            warm()
        _is_warm = True


def is_warm() -> bool:
    """Whether this process can do its work; found out once, and a failure again after a while."""
    global _failed_at  # noqa: PLW0603 - see above
    with _lock:
        if not _is_warm and time.monotonic() - _failed_at >= TRY_AGAIN_AFTER_S:
            try:
                warm_up()
            except Exception:
                _failed_at = time.monotonic()
                logger.exception("this process cannot do its work")
    return _is_warm


def prepare_parent() -> None:
    """Before the fork: use every part once, close what must not be shared, freeze the rest.

    The children then share the memory of the parent. A part that does not work is for the children
    to say: the parent lives on.
    """
    is_warm()
    connections.close_all()
    gc.collect()
    gc.freeze()
