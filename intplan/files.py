"""Files in and out: bounded reading with clear errors, and writing that leaves no half file."""

from __future__ import annotations

import contextlib
import os
import secrets
import stat

from intplan.errors import IntplanError, nearest

Path = str | os.PathLike[str]


def read_file(path: Path, limit: int, error: type[IntplanError] = IntplanError) -> bytes:
    """Return the bytes of a file.

    Parameters
    ----------
    path : the file; a pipe will do
    limit : the most bytes to take
    error : the exception class to raise

    Raises
    ------
    error
        The file is missing, unreadable, a folder, or longer than `limit`.
    """
    where = os.fsdecode(path)
    if not where:
        raise error("the name of a file to read is empty")
    try:
        with open(path, "rb") as file:
            data = file.read(limit + 1)
    except FileNotFoundError:
        raise error("no such file" + _near_file(where), where) from None
    except IsADirectoryError:
        raise error("this is a folder, not a file", where) from None
    except PermissionError:
        raise error("the file may not be read (no permission)", where) from None
    except (OSError, ValueError) as problem:
        raise error(f"the file cannot be read: {_reason(problem)}", where) from None
    if len(data) > limit:
        raise error(f"the file is longer than the limit of {limit:,} bytes", where)
    return data


def _near_file(path: str) -> str:
    """Return a hint at a file of a similar name in the same folder."""
    folder, name = os.path.split(path)
    try:
        near = nearest(name, sorted(os.listdir(folder or "."))[:10_000])
    except (OSError, ValueError):
        return ""
    return "" if near is None else f'; did you mean "{os.path.join(folder, near)}"?'


def _reason(problem: Exception) -> str:
    return getattr(problem, "strerror", None) or str(problem)


def write_atomically(path: Path, data: bytes) -> None:
    """Write a file so that at any moment it holds either its old content or all of the new.

    The data go to a fresh file in the same folder, which then takes the place of the old one; a
    symbolic link stays a link, and an existing file keeps its permissions. A device or a pipe
    is written to directly.

    Raises
    ------
    IntplanError
        The file cannot be written; what was there before is untouched.
    """
    where = os.fsdecode(path)
    if not where:
        raise IntplanError("the name of a file to write is empty")
    try:
        target = os.path.realpath(path)
        mode = _mode(target)
        if where.endswith(os.sep) or (mode is not None and stat.S_ISDIR(mode)):
            raise IntplanError("this is a folder, not a file", where)
        if mode is not None and not stat.S_ISREG(mode):
            with open(target, "wb") as file:
                file.write(data)
            return
        _replace(target, data, mode)
    except PermissionError:
        raise IntplanError("the file may not be written (no permission)", where) from None
    except (OSError, ValueError) as problem:
        lost = isinstance(problem, FileNotFoundError)
        if lost and not os.path.isdir(os.path.dirname(where) or "."):
            raise IntplanError("the folder of this file does not exist", where) from None
        raise IntplanError(f"the file cannot be written: {_reason(problem)}", where) from None


def refusal(path: str) -> str | None:
    """Return what the system says against a new file at a place, None if nothing.

    A fresh file is made in the folder and taken away again: some folders that may be written to
    take none all the same.
    """
    try:
        _mode(path)
        fresh, handle = _fresh_file(os.path.dirname(path))
        os.close(handle)
        os.unlink(fresh)
    except OSError as problem:
        return _reason(problem)
    return None


def _mode(target: str) -> int | None:
    try:
        return os.stat(target).st_mode
    except FileNotFoundError:
        return None


def _replace(target: str, data: bytes, mode: int | None) -> None:
    """Write `data` beside `target`, to the disk, and move it into place."""
    folder = os.path.dirname(target)
    fresh, handle = _fresh_file(folder)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        if mode is not None:
            os.chmod(fresh, stat.S_IMODE(mode))
        os.replace(fresh, target)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(fresh)
        raise
    _sync_folder(folder)


def _fresh_file(folder: str) -> tuple[str, int]:
    """Make a file of a new name in a folder; return its path and an open handle."""
    fresh = os.path.join(folder, f".intplan-{secrets.token_hex(8)}.part")
    return fresh, os.open(fresh, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666)


def _sync_folder(folder: str) -> None:
    """Put the new name on the disk too, where the system lets a folder be synced."""
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
