"""Files are written whole or not at all, and read only as far as they may go."""

from __future__ import annotations

import errno
import os
import platform
import stat
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path

_PART = ".part"


def read_limited(path: Path, most: int) -> bytes:
    """Bytes of a file, one more than `most` at most, so that the caller sees that there are more.

    Raises
    ------
    OSError
        It cannot be read, or is neither a file nor a link to one: a pipe that nobody writes to, or
        a device that never ends, would hold the program up for good.
    """
    kind = path.stat().st_mode
    if not (stat.S_ISREG(kind) or stat.S_ISDIR(kind)):  # opening says best what a folder is
        raise OSError(errno.EINVAL, "this is a pipe or a device, not a file", str(path))
    with path.open("rb") as file:
        return file.read(most + 1)


def write_whole(path: Path, content: bytes, *, clear: bool = True) -> None:
    """Write one file; see `write_all`."""
    write_all({path: content}, clear=clear)


def write_all(contents: Mapping[Path, bytes], *, clear: bool = True) -> None:
    """Write files so that no name ever holds half of one, replacing what was there.

    The bytes of all of them go to temporary files in the same folders, which only then take the
    names: after a failure (a full disk, an interrupt) whatever was there before is still there,
    and nothing else. What a process that was killed has left of the same names is cleared away,
    unless the caller sees to that (`clear`): it takes a look at every name in the folder.
    A name that is a link keeps being one; a device or pipe is written to directly.

    Raises
    ------
    OSError
        A folder does not exist, or a file may not or cannot be written; carries its name.
    """
    staged: list[tuple[Path, Path, Path]] = []
    direct: list[tuple[Path, bytes]] = []
    try:
        for index, (path, content) in enumerate(contents.items()):
            with _naming(path):
                target = path.resolve() if path.is_symlink() else path
                if target.exists() and not target.is_file():
                    direct.append((target, content))
                    continue
                part = target.with_name(f"{_part_prefix(target)}{_owner()}.{index}{_PART}")
                if clear:
                    _clear_away(target)
                if target.exists() and not os.access(target, os.W_OK):
                    raise PermissionError(13, "the file may not be written")
                staged.append((path, part, target))
                _write_part(part, target, content)
        for path, part, target in staged:
            with _naming(path):
                part.replace(target)
        for target, content in direct:
            with _naming(target):
                target.write_bytes(content)
    finally:
        for _, part, _ in staged:
            with suppress(OSError):  # what went wrong first is what to say
                part.unlink(missing_ok=True)


def _write_part(part: Path, target: Path, content: bytes) -> None:
    part.unlink(missing_ok=True)
    with part.open("xb") as file:
        if target.exists():  # a plan that only its owner may read stays so
            part.chmod(stat.S_IMODE(target.stat().st_mode))
        file.write(content)
        file.flush()
        os.fsync(file.fileno())


def _part_prefix(target: Path) -> str:
    return f".{target.name[:40]}."


def _owner() -> str:
    return f"{platform.node() or 'here'}-{os.getpid()}"


def _clear_away(target: Path) -> None:
    """Remove temporary files of this name whose process, on this machine, is gone."""
    if os.name != "posix":
        return
    prefix = f"{_part_prefix(target)}{platform.node() or 'here'}-"
    for entry in os.scandir(target.parent):
        if entry.name.startswith(prefix) and entry.name.endswith(_PART):
            number = entry.name.removeprefix(prefix).partition(".")[0]
            if number.isdecimal() and not _is_running(int(number)):
                Path(entry.path).unlink(missing_ok=True)


def _is_running(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return True


@contextmanager
def _naming(path: Path) -> Iterator[None]:
    """Put the name that was asked for into an OSError, not that of the temporary file."""
    try:
        yield
    except FileNotFoundError as error:
        raise FileNotFoundError(error.errno, error.strerror, str(path.parent)) from None
    except OSError as error:
        raise type(error)(error.errno, error.strerror, str(path)) from None
