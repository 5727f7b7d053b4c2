"""Files are written whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path


def write_whole(path: Path, content: bytes) -> None:
    """Write a file so that its name never holds half of it, replacing what was there.

    The bytes go to a temporary file in the same folder, which then takes the name: after a
    failure (a full disk, an interrupt) whatever was there before is still there.

    Raises
    ------
    OSError
        The folder does not exist, or the file cannot be written.
    """
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with part.open("xb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    except FileNotFoundError as error:
        raise FileNotFoundError(error.errno, error.strerror, str(path.parent)) from None
    except OSError as error:
        raise type(error)(error.errno, error.strerror, str(path)) from None
    finally:
        part.unlink(missing_ok=True)
