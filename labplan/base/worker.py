"""What a worker does at its start: load all there is before the fork, and freeze it.

The children then share the memory of the parent: about a third of what each would need by itself.
"""

import gc
import resource
import signal
from typing import Any

from celery.signals import worker_init, worker_process_init
from django.db import connections

from labplan.base import warming
from labplan.base.endings import end_with_parent

# Address space of a child [bytes]: a structure that eats memory ends its child, not the machine.
CHILD_ADDRESS_SPACE = 4 * 1024**3


@worker_init.connect
def prepare_parent(**_: Any) -> None:
    """Before the fork: use every part once, close what must not be shared, freeze the rest."""
    warming.warm_up()
    connections.close_all()
    gc.collect()
    gc.freeze()


@worker_process_init.connect
def prepare_child(**_: Any) -> None:
    """After the fork: end with the parent, and stay within bounds."""
    end_with_parent(signal.SIGKILL)
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    bounded = hard != resource.RLIM_INFINITY and hard < CHILD_ADDRESS_SPACE
    resource.setrlimit(resource.RLIMIT_AS, (hard if bounded else CHILD_ADDRESS_SPACE, hard))
