"""The slow half of setup_env.py: makes the virtual environment and runs pip, with progress.

Loaded only when something has to be installed. Readable by Python 3.6, as setup_env.py is.
The user's own pip configuration (files and PIP_ variables) reaches pip unchanged.
"""

import collections
import os
import re
import shutil
import subprocess
import sys
import sysconfig
import threading
import time

LAST_LINES = 12
TICK_S = 0.2
PINNED = re.compile(r"^([A-Za-z0-9][A-Za-z0-9._-]*)==[^;\\]*(;)?", re.MULTILINE)
OFFLINE = (
    "that this machine is offline or cannot reach its package index "
    "(proxy, certificate, PIP_INDEX_URL)"
)
DISK_FULL = "a full disk: the packages need up to 700 MB"
NOT_IN_A_LOCK = {"pip", "setuptools", "wheel"}


class PackagesError(Exception):
    """Packages could not be installed; the text says why and what to do."""

    def __init__(self, text, changed=True):
        super().__init__(text)
        self.changed = changed


def clean_environment():
    """The caller's environment without what would make Python look for packages elsewhere."""
    environment = dict(os.environ, PYTHONUNBUFFERED="1", PYTHONIOENCODING="utf-8")
    for name in ("PYTHONPATH", "PYTHONHOME", "__PYVENV_LAUNCHER__"):
        environment.pop(name, None)
    return environment


def make_venv(venv, guard):
    """Make the virtual environment in a folder that may exist already."""
    # From inside a virtual environment the Python below it is wanted: ours may be this very one.
    python = getattr(sys, "_base_executable", None) or sys.executable
    ended = subprocess.run(
        [python, "-m", "venv", venv],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        env=clean_environment(),
        pass_fds=(guard,),
        check=False,
    )
    if ended.returncode != 0:
        shown = ended.stdout.decode("utf-8", "replace").strip().splitlines()[-LAST_LINES:]
        raise PackagesError(
            f"{python} could not make a virtual environment in {venv}. It said:\n"
            + indented(shown)
            + "\nIs the disk full, or venv installed only in part? On Debian and Ubuntu: "
            f"sudo apt install --reinstall python{sys.version_info[0]}.{sys.version_info[1]}-venv"
        )


def locked_names(lock_text):
    """(all names in a lock file, those needed on every machine), in the form pip compares."""
    everything, everywhere = set(), set()
    for name, marker in PINNED.findall(lock_text):
        everything.add(plain_name(name))
        if not marker:
            everywhere.add(plain_name(name))
    return everything, everywhere


def plain_name(name):
    return re.sub(r"[-_.]+", "-", name).lower()


def installed_names(site_packages):
    """Names of the packages in a site-packages folder."""
    ending = ".dist-info"
    return {
        plain_name(name.split("-")[0])
        for name in os.listdir(site_packages)
        if name.endswith(ending)
    }


def site_packages_of(python):
    folder = os.path.dirname(os.path.dirname(python))
    return sysconfig.get_path("purelib", "venv", vars={"base": folder})


def install_lock(python, lock_file, level, guard):
    """Install exactly what the lock file lists; packages of an older lock file go."""
    with open(lock_file, encoding="utf-8") as file:
        lock_text = file.read()
    everything, everywhere = locked_names(lock_text)
    site_packages = site_packages_of(python)
    started = time.monotonic()
    progress = Progress(level, len(PINNED.findall(lock_text)), site_packages)
    run_pip(
        python,
        ["install", "--require-hashes", "--progress-bar", "off", "-r", lock_file],
        guard,
        progress,
    )
    missing = everywhere - installed_names(site_packages)
    if missing:
        raise PackagesError(
            "pip ended well, but these packages are not in .venv: "
            + ", ".join(sorted(missing))
            + "\nDoes your pip configuration send packages elsewhere (PIP_TARGET, PIP_PREFIX, "
            "PIP_USER, PIP_ROOT, PIP_DRY_RUN)? Unset that and call again."
        )
    left_over = installed_names(site_packages) - everything - NOT_IN_A_LOCK
    if left_over:
        run_pip(python, ["uninstall", "--yes", *sorted(left_over)], guard, progress)
    count = len(installed_names(site_packages) & everything)
    progress.close(f"Set up: {count} packages in {time.monotonic() - started:.0f} s.")


def run_pip(python, arguments, guard, progress):
    """Run pip, feeding its lines to the progress; a failure shows the last of them."""
    process = subprocess.Popen(
        [python, "-m", "pip", "--disable-pip-version-check", "--no-input", *arguments],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        env=clean_environment(),
        pass_fds=(guard,),
    )
    last = collections.deque(maxlen=LAST_LINES)
    with process, progress:
        for raw in process.stdout:
            line = raw.decode("utf-8", "replace").rstrip()
            if not line.startswith("Requirement already satisfied: "):
                last.append(line)
            progress.read(line)
    if process.returncode != 0:
        reason = DISK_FULL if progress.installing else OFFLINE
        raise PackagesError(
            "pip could not install the packages. Its last lines:\n"
            + indented(last)
            + f"\nA usual reason is {reason}. When that is mended, call again.",
            changed=progress.installing,
        )


def indented(lines):
    return "\n".join("    " + line for line in lines)


class Progress:
    """One line that changes on a terminal; elsewhere one line when it starts and one when done.

    pip says what it fetches, but is silent while it installs: then the package folders are counted.
    """

    def __init__(self, level, total, site_packages, stream=None):
        self.stream = stream or sys.stdout
        self.on_terminal = self.stream.isatty()
        self.total = total
        self.site_packages = site_packages
        self.fetched = 0
        self.installing = False
        self.order = []
        self.before = installed_names(site_packages)
        self.stop = threading.Event()
        if not self.on_terminal:
            print(f"Setting up .venv (level {level}) ...", file=self.stream, flush=True)

    def __enter__(self):
        self.stop.clear()
        self.thread = threading.Thread(target=self._tick, daemon=True)
        self.thread.start()
        return self

    def __exit__(self, *_):
        self.stop.set()
        self.thread.join()
        self._clear()

    def read(self, line):
        """Take one line of pip's output."""
        words = line.split()
        if line.startswith(("Collecting ", "Requirement already satisfied: ")):
            self.fetched += 1
            name = words[1] if words[0] == "Collecting" else words[3]
            self._show(
                f"fetched {self.fetched} of {self.total} packages, {name.split('==')[0]} ..."
            )
        elif line.startswith("Ignoring ") and "markers" in line:
            self.total -= 1
        elif line.startswith("Installing collected packages: "):
            self.order = [plain_name(name) for name in line.split(": ", 1)[1].split(", ")]
            self.installing = True

    def _tick(self):
        while not self.stop.wait(TICK_S):
            if self.installing:
                done = installed_names(self.site_packages) - self.before
                waiting = [name for name in self.order if name not in done] or self.order[-1:]
                self._show(f"{len(done)} of {len(self.order)} packages, {waiting[0]} ...")

    def _show(self, text):
        if self.on_terminal:
            width = shutil.get_terminal_size().columns - 1
            self.stream.write("\r\x1b[K" + f"Setting up: {text}"[:width])
            self.stream.flush()

    def _clear(self):
        if self.on_terminal:
            self.stream.write("\r\x1b[K")
            self.stream.flush()

    def close(self, text):
        print(text, file=self.stream, flush=True)
