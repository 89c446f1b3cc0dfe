"""Bytes on disk to text and back: bounded, UTF-8, and written whole or not at all."""

from __future__ import annotations

import contextlib
import errno
import os
import tempfile
from pathlib import Path

from sumwright.errors import SumwrightError, shown

MOST_BYTES = 4 * 1024 * 1024


def read_text(path: str | os.PathLike, error: type[SumwrightError], most: int = MOST_BYTES) -> str:
    """The text of a file, at most `most` bytes of UTF-8; a byte order mark is dropped.

    Raises
    ------
    error
        If it cannot be opened, is a folder, is too large or is not UTF-8; the
        sentence names the file.
    """
    name = shown(os.fspath(path), 120)
    try:
        with open(path, "rb") as stream:  # noqa: PTH123 - also takes pipes and what a shell hands over
            data = stream.read(most + 1)
    except IsADirectoryError:
        raise error(f"{name} is a folder; a file is wanted.") from None
    except FileNotFoundError:
        raise error(f"{name} does not exist.") from None
    except (OSError, ValueError) as problem:
        why = (problem.strerror if isinstance(problem, OSError) else None) or "not a usable file name"
        raise error(f"{name} cannot be read: {why}.") from None
    return decode(data, error, name, most)


def decode(data: bytes, error: type[SumwrightError], name: str = "The file", most: int = MOST_BYTES) -> str:
    """UTF-8 bytes as text, under the same limits as `read_text`."""
    if len(data) > most:
        raise error(f"{name} is larger than {most / 2**20:g} MB, the most that is read.")
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise error(f"{name} is UTF-16; save it as UTF-8.")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as problem:
        raise error(f"{name} is not UTF-8: byte {problem.start + 1} is 0x{data[problem.start]:02x}.") from None


def write_whole(path: str | os.PathLike, text: str | bytes) -> None:
    """Replace a file in one step: readers see the old file or the new one, a crash loses neither.

    The text goes to a temporary file beside it, is flushed to the disk, and takes
    the name. An existing file keeps its permissions. What is no file (a device, a pipe) is written to.

    Raises
    ------
    SumwrightError
        If it cannot be written; nothing is left behind.
    """
    target = Path(path)
    data = text.encode("utf-8") if isinstance(text, str) else text
    temporary = None
    try:
        # A device or a pipe (/dev/stdout, /dev/null) is written to; replacing it would destroy it.
        if target.exists() and not target.is_file() and not target.is_dir():
            with target.open("wb", buffering=0) as stream:
                rest = memoryview(data)
                while rest:
                    rest = rest[stream.write(rest) :]
            return
        # A link keeps pointing where it did: its target is replaced, not the link.
        target = target.resolve()
        handle, temporary = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name[:40]}.", suffix=".part")
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        Path(temporary).chmod(target.stat().st_mode & 0o777 if target.exists() else 0o666 & ~_umask())
        Path(temporary).replace(target)
        temporary = None
        with contextlib.suppress(OSError):  # the name itself; not every file system lets a folder be flushed
            folder = os.open(target.parent, os.O_RDONLY)
            try:
                os.fsync(folder)
            finally:
                os.close(folder)
    except (OSError, ValueError, RuntimeError) as problem:
        raise _cannot_be_written(path, problem) from None
    finally:
        if temporary is not None:
            with contextlib.suppress(OSError):
                Path(temporary).unlink()


def check_writable(path: str | os.PathLike) -> None:
    """Refuse now what `write_whole` would refuse for its place, before other files are written or time is spent.

    Raises
    ------
    SumwrightError
        If the folder is not there or takes no file, or the name is a folder's.
    """
    target = Path(path)
    try:
        if target.is_dir():
            raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
        if target.exists() and not target.is_file():
            return
        with tempfile.TemporaryFile(dir=target.resolve().parent):
            pass
    except (OSError, ValueError, RuntimeError) as problem:
        raise _cannot_be_written(path, problem) from None


def _cannot_be_written(path, problem: Exception) -> SumwrightError:
    why = (problem.strerror if isinstance(problem, OSError) else None) or "not a usable file name"
    return SumwrightError(f"{shown(os.fspath(path), 120)} cannot be written: {why}.")


def _umask() -> int:
    """The mask new files get; there is no way to ask without setting it."""
    mask = os.umask(0o077)
    os.umask(mask)
    return mask
