"""Files that appear whole or not at all."""

import contextlib
import hashlib
import os
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

from labplan.operations.errors import OperationRefused

Progress = Callable[[int, int], None]  # how much is done, of how much


def read_start(path: Path, length: int) -> bytes:
    """The first bytes of a file, which tell what it is; OperationRefused when it cannot be read."""
    try:
        with path.open("rb") as file:
            return file.read(length)
    except OSError as error:
        raise OperationRefused(f"{path} cannot be read: {error.strerror}.") from error


@contextlib.contextmanager
def draft_beside(place: Path) -> Iterator[Path]:
    """A new file in the folder of `place`, readable by its owner only; gone at the end."""
    handle, name = tempfile.mkstemp(dir=place.parent, prefix=f".{place.name}.", suffix=".part")
    os.close(handle)
    try:
        yield Path(name)
    finally:
        for suffix in ("", "-wal", "-shm", "-journal"):
            Path(name + suffix).unlink(missing_ok=True)


def put_in_place(draft: Path, place: Path, *, keep_as: Path | None = None) -> None:
    """Flush `draft` and give it the name `place`, at once; keep what was there as `keep_as`."""
    flush(draft)
    if keep_as is not None:
        try:
            os.link(place, keep_as)  # so that there is a file at every moment
        except OSError:
            os.rename(place, keep_as)  # a file system without links
    os.replace(draft, place)
    flush(place.parent)


def flush(path: Path) -> None:
    """See that a file's bytes, or a folder's names, are on the disk."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def hash_file(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
