"""What a worker does at its start: load all there is before the fork, and freeze it.

The children then share the memory of the parent: about a third of what each would need by itself.
"""

import logging
import resource
import signal
from typing import Any

from celery.signals import celeryd_init, setup_logging, worker_init, worker_process_init
from celery.utils.log import get_multiprocessing_logger

from labplan.base import metrics, warming
from labplan.base.endings import end_with_parent

# Address space of a child [bytes]: a structure that eats memory ends its child, not the machine.
CHILD_ADDRESS_SPACE = 4 * 1024**3


@celeryd_init.connect
@setup_logging.connect
def keep_our_logging(**_: Any) -> None:
    """Being asked is enough: with somebody listening here, Celery adds no handlers of its own."""
    # No raw lines among ours: warnings, and what the pool says of children that died.
    logging.captureWarnings(True)
    get_multiprocessing_logger().propagate = True


@worker_init.connect
def prepare_parent(**_: Any) -> None:
    warming.prepare_parent()


@worker_process_init.connect
def prepare_child(**_: Any) -> None:
    """After the fork: end with the parent, stay within bounds, take over what the dead counted."""
    end_with_parent(signal.SIGKILL)
    metrics.fold_dead()
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    bounded = hard != resource.RLIM_INFINITY and hard < CHILD_ADDRESS_SPACE
    resource.setrlimit(resource.RLIMIT_AS, (hard if bounded else CHILD_ADDRESS_SPACE, hard))
