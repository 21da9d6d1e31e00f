"""The files in which processes count: one set for each, folded into one when it has died.

Workers are replaced again and again, and the files of the dead would pile up for ever; but what
they counted must stay, or the sums would fall. Folding holds the lock alone, reading holds it with
others, so that no scrape counts a file twice or not at all.
"""

import fcntl
import os
import re
import struct
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path

from prometheus_client.mmap_dict import MmapedDict

_NAMED = re.compile(r"(counter|histogram)_(.+)-(\d+)\.db")


@cache
def _space() -> str:
    """Where process numbers are unique: containers that share a folder have the same numbers."""
    try:
        return f"ns{os.stat('/proc/self/ns/pid').st_ino}"
    except OSError:
        return "host"


def name_of_this_process() -> str:
    return f"{_space()}-{os.getpid()}"


@contextmanager
def locked(folder: Path, *, alone: bool = False) -> Iterator[None]:
    """Lock the folder itself, for this process alone or together with others that read."""
    lock = os.open(folder, os.O_RDONLY)
    try:
        fcntl.flock(lock, fcntl.LOCK_EX if alone else fcntl.LOCK_SH)
        yield
    finally:
        os.close(lock)


def begun(folder: Path) -> list[str]:
    """The files that hold something: a process makes its file first and then writes in it."""
    return sorted(str(path) for path in folder.glob("*.db") if path.stat().st_size)


def fold_dead(folder: Path) -> int:
    """Add what dead processes counted to one file a kind; return how many files went."""
    if not _of_the_dead(folder):
        return 0
    with locked(folder, alone=True):
        dead = _of_the_dead(folder)  # another process may have been faster
        for path in dead:
            kind = path.name.partition("_")[0]
            _add_to(folder / f"{kind}_{_space()}-folded.db", _values_in(path))
            path.unlink()
    return len(dead)


def _of_the_dead(folder: Path) -> list[Path]:
    return sorted(path for path in folder.glob("*.db") if _is_of_a_dead_process(path.name))


def _is_of_a_dead_process(name: str) -> bool:
    match = _NAMED.fullmatch(name)
    return bool(match) and match[2] == _space() and not _is_alive(int(match[3]))


def _is_alive(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        pass
    return True


def _values_in(path: Path) -> dict[str, float]:
    """What a file holds; nothing when its process died while making it, or the disk was full."""
    try:
        return {key: value for key, value, _, _ in MmapedDict.read_all_values_from_file(str(path))}
    except (struct.error, RuntimeError, UnicodeDecodeError):
        return {}


def _add_to(sums: Path, values: dict[str, float]) -> None:
    if not values:
        return
    kept = MmapedDict(str(sums))
    try:
        for key, value in values.items():
            before, _ = kept.read_value(key)
            kept.write_value(key, before + value, 0.0)
    finally:
        kept.close()
