"""How gunicorn serves labplan: gunicorn -c deploy/gunicorn.conf.py labplan.wsgi

LABPLAN_BIND          address and port, or unix:/path  (default: 127.0.0.1:8000)
LABPLAN_WEB_WORKERS   at most this many processes (default: two for each core)
FORWARDED_ALLOW_IPS   proxies whose X-Forwarded-Proto is believed (default: this machine)
LABPLAN_LOG           plain or json, as everywhere
"""

import os
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))
os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labplan.settings.default")

from labplan.base.logs import STYLES, logging_configuration  # noqa: E402
from labplan.settings.environment import one_of_words, whole_number  # noqa: E402

chdir = str(ROOT)
bind = os.environ.get("LABPLAN_BIND") or "127.0.0.1:8000"
forwarded_allow_ips = os.environ.get("FORWARDED_ALLOW_IPS") or "127.0.0.1,::1"

# One request a process at a time: each holds one database connection, and RDKit holds the core.
worker_class = "sync"
_two_a_core = 2 * (os.cpu_count() or 1)
workers = min(_two_a_core, whole_number("LABPLAN_WEB_WORKERS", _two_a_core, highest=64))
# Loaded once and shared: see when_ready.
preload_app = True

# A PDF of a long route takes a second or two; what takes a minute hangs.
timeout = 60
graceful_timeout = 30
# What leaks slowly never grows large; not all at the same time.
max_requests = 10_000
max_requests_jitter = 1_000
# Heartbeats are files: on a slow disk they would be taken for hanging workers.
if os.access("/dev/shm", os.W_OK):
    worker_tmp_dir = "/dev/shm"

# Signals and systemd are enough; its socket would lie in the home folder.
control_socket_disable = True

# RequestMiddleware logs each answer; gunicorn's own lines take the form of all others.
accesslog = None
errorlog = "-"
logconfig_dict = logging_configuration(one_of_words("LABPLAN_LOG", STYLES))
logconfig_dict["loggers"]["gunicorn.error"] = {"level": "INFO", "handlers": [], "propagate": True}


def when_ready(server):
    """Before the first fork: use everything once and freeze it, so that the workers share it."""
    from labplan import urls  # noqa: F401 - loads all views
    from labplan.base import warming

    warming.prepare_parent()


def child_exit(server, worker):
    """A worker has gone: keep what it has counted, let go of its files."""
    from labplan.base import metrics

    metrics.fold_dead()
