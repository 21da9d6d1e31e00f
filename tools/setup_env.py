"""Makes and keeps .venv: python3 tools/setup_env.py run|test|dev

make calls this before anything else, with whatever python3 the machine has. So it uses the standard
library only, and words that Python 3.6 can still read: an old Python gets a sentence, not a
SyntaxError.

A level names a lock file; dev contains test contains run. A stamp inside .venv says what is
installed. It says "incomplete" from before the first change until after the last one: whatever
stops a set up, the next call sees that word and begins again.
"""

import hashlib
import json
import os
import sys

OLDEST_PYTHON = (3, 11)
LOCK_FILES = {
    "run": "requirements.lock",
    "test": "requirements-test.lock",
    "dev": "requirements-dev.lock",
}
LEVELS = tuple(LOCK_FILES)
STAMP = "setup.json"
GUARD = "setup.guard"
ROOT = os.path.dirname(os.path.dirname(os.path.abspath(__file__)))


class SetUpError(Exception):
    """The set up cannot go on; the text says why and what to do."""


def version_text(version):
    return ".".join(str(part) for part in version[:3])


def require_python(version, executable):
    """Refuse a Python that is too old for the locked packages."""
    if tuple(version[:2]) < OLDEST_PYTHON:
        raise SetUpError(
            f"labplan needs Python {version_text(OLDEST_PYTHON)} or newer; {executable} is "
            f"{version_text(version)}.\nInstall a newer one and name it, for example: "
            "make demo PYTHON=python3.12"
        )


def require_venv_modules(find_spec, version):
    """Refuse a Python without venv or ensurepip; Debian ships them apart."""
    specs = [find_spec(name) for name in ("venv", "ensurepip")]
    if any(spec is None or spec.origin is None for spec in specs):  # an empty folder has no origin
        package = f"python{version[0]}.{version[1]}-venv"
        raise SetUpError(
            "This Python cannot make virtual environments: its modules venv and ensurepip are not "
            "installed.\nOn Debian and Ubuntu they are in a package of their own "
            f"(python3-venv):\n    sudo apt install {package}\n"
            "Or name another Python: make demo PYTHON=/path/to/python3"
        )


def read_stamp(venv):
    """What the stamp says: None without one, {} for one that cannot be read."""
    try:
        with open(os.path.join(venv, STAMP), encoding="utf-8") as file:
            stamp = json.load(file)
    except FileNotFoundError:
        return None
    except ValueError:
        return {}
    return stamp if isinstance(stamp, dict) else {}


def write_stamp(venv, stamp):
    path = os.path.join(venv, STAMP)
    with open(path + ".new", "w", encoding="utf-8") as file:
        json.dump(stamp, file, indent=1, sort_keys=True)
    os.replace(path + ".new", path)


def lock_digest(root, level):
    with open(os.path.join(root, LOCK_FILES[level]), "rb") as file:
        return hashlib.sha256(file.read()).hexdigest()


def venv_python(venv):
    return os.path.join(venv, "bin", "python")


def python_answers(executable, version):
    """Whether this Python starts and is of this version (a few milliseconds)."""
    import subprocess

    code = f"import sys; sys.exit(sys.version_info[:3] != {tuple(version[:3])!r})"
    try:
        ended = subprocess.run(
            [executable, "-I", "-S", "-c", code], stderr=subprocess.DEVNULL, check=False
        )
    except OSError:
        return False
    return ended.returncode == 0


def why_unusable(venv, stamp, version):
    """Why this .venv has to be made again; empty when it can be kept."""
    if stamp.get("state") != "complete" or stamp.get("level") not in LEVELS:
        return "an earlier set up did not come to its end"
    if stamp.get("folder") != os.path.realpath(venv):
        return "the folder was moved or copied"
    if stamp.get("python") != version_text(version):
        return f"it was made with Python {stamp.get('python')}, this is {version_text(version)}"
    if not python_answers(venv_python(venv), version):
        return "its Python is gone or broken"
    return ""


def has_level(root, stamp, level):
    """Whether the packages for the level are there, as the lock file lists them today."""
    installed = stamp.get("level")
    return (
        installed in LEVELS
        and LEVELS.index(installed) >= LEVELS.index(level)
        and stamp.get("lock_sha256") == lock_digest(root, installed)
    )


def require_own_folder(venv):
    """Refuse a .venv with something in it that was not made here: it is somebody's work."""
    found = set(os.listdir(venv)) if os.path.isdir(venv) else set()
    # The stamp is read after the list: another set up writes it before anything else.
    if found - {GUARD, STAMP + ".new"} and read_stamp(venv) is None:
        raise SetUpError(
            f"{venv} was not made by this project, so it is left alone.\n"
            "Delete or rename it and call again."
        )


def set_up(root, level, version=sys.version_info):
    """Make .venv hold the packages of the level; returns at once when it does."""
    venv = os.path.join(root, ".venv")
    if is_ready(root, venv, level, version):
        return
    require_own_folder(venv)
    with Guard(venv) as guard:
        if is_ready(root, venv, level, version):  # another call did it while this one waited
            return
        stamp = read_stamp(venv)
        reason = why_unusable(venv, stamp, version) if stamp is not None else ""
        if reason:
            print(f"Making .venv again: {reason}.", flush=True)
        fresh = stamp is None or bool(reason)
        if not fresh:  # what was installed stays installed
            level = max(level, stamp["level"], key=LEVELS.index)
        kept_stamp = None if fresh else stamp
        install(root, venv, level, guard=guard, kept_stamp=kept_stamp, version=version)


def is_ready(root, venv, level, version):
    stamp = read_stamp(venv)
    return (
        stamp is not None
        and has_level(root, stamp, level)
        and not why_unusable(venv, stamp, version)
    )


class Guard:
    """One set up at a time. The lock is held through an open file in .venv.

    Child processes inherit the file, so when this process is killed the lock lasts until its pip
    has ended too, and the next call cannot start beside it.
    """

    def __init__(self, venv):
        self.venv = venv
        self.path = os.path.join(venv, GUARD)

    def __enter__(self):
        while True:
            os.makedirs(self.venv, exist_ok=True)
            self.descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o644)
            self._wait()
            if self._is_still_the_file():
                return self.descriptor
            os.close(self.descriptor)  # .venv was deleted while this call waited

    def __exit__(self, *_):
        os.close(self.descriptor)

    def _wait(self):
        import fcntl

        try:
            fcntl.flock(self.descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            print("Another set up is running in this folder: waiting for it ...", flush=True)
            fcntl.flock(self.descriptor, fcntl.LOCK_EX)

    def _is_still_the_file(self):
        try:
            return os.path.samestat(os.stat(self.path), os.fstat(self.descriptor))
        except FileNotFoundError:
            return False


def install(root, venv, level, *, guard, kept_stamp, version):
    """Bring .venv to the level. kept_stamp is that of a sound .venv, None to make a new one."""
    import setup_packages

    if kept_stamp is None:
        import importlib.util

        require_venv_modules(importlib.util.find_spec, version)
    digest = lock_digest(root, level)
    write_stamp(venv, {"state": "incomplete"})
    lock_file = os.path.join(root, LOCK_FILES[level])
    try:
        if kept_stamp is None:
            empty_folder(venv)
            setup_packages.make_venv(venv, guard)
        setup_packages.install_lock(venv_python(venv), lock_file, level, guard)
    except setup_packages.PackagesError as failure:
        if kept_stamp is not None and not failure.changed:
            write_stamp(venv, kept_stamp)
        raise SetUpError(str(failure)) from failure
    write_stamp(
        venv,
        {
            "state": "complete",
            "level": level,
            "lock_sha256": digest,
            "python": version_text(version),
            "folder": os.path.realpath(venv),
        },
    )


def empty_folder(venv):
    """Delete what is in .venv, but neither the stamp nor the guard: they tell the next call."""
    import shutil

    for name in os.listdir(venv):
        path = os.path.join(venv, name)
        if name in (STAMP, GUARD):
            continue
        if os.path.isdir(path) and not os.path.islink(path):
            shutil.rmtree(path)
        else:
            os.unlink(path)


def main(arguments):
    try:
        require_python(sys.version_info, sys.executable)
        if len(arguments) != 1 or arguments[0] not in LEVELS:
            raise SetUpError("Usage: python3 tools/setup_env.py " + "|".join(LEVELS))
        set_up(ROOT, arguments[0])
    except SetUpError as error:
        print(f"Set up stopped: {error}", file=sys.stderr)
        return 2
    except OSError as error:
        print(
            f"Set up stopped: {error.strerror or error} ({error.filename or ROOT}).\n"
            f"The set up writes into {ROOT}: make that folder writable for you, with 1 GB free, "
            "or copy the project to a folder of your own.",
            file=sys.stderr,
        )
        return 2
    except KeyboardInterrupt:
        print("\nSet up stopped by you; the next call begins again.", file=sys.stderr)
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
