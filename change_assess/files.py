"""Safe writing: an output appears whole or not at all."""

from __future__ import annotations

import hashlib
import os
import re
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from change_assess.errors import FileError


@contextmanager
def replacing(path: str | Path) -> Iterator[Path]:
    """Give a temporary path beside `path`; on success flush it to disk and rename it, on failure remove it.

    The temporary name keeps the suffix, so writers that choose a format by suffix work.

    Raises
    ------
    FileError
        If the folder cannot be made or written to.
    """
    target = Path(path)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(prefix=f".{target.stem}-", suffix=target.suffix, dir=target.parent)
    except OSError as error:
        raise FileError(f"{target} cannot be written: {error.strerror or error}.") from error
    os.close(handle)
    temporary = Path(name)
    try:
        yield temporary
        with open(temporary, "rb") as written:
            os.fsync(written.fileno())
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, target)
    except FileError:
        raise
    except OSError as error:
        raise FileError(f"{target} cannot be written: {error.strerror or error}.") from error
    finally:
        temporary.unlink(missing_ok=True)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def write_text(path: str | Path, text: str) -> Path:
    """Write `text` as UTF-8 with ``\\n`` line ends, safely; return the path."""
    with replacing(path) as temporary:
        temporary.write_bytes(text.encode("utf-8"))
    return Path(path)


def slug(name: str) -> str:
    """Make a name fit for a file: letters, digits, points, dashes and underscores."""
    return re.sub(r"[^\w.-]+", "-", name)[:120]


def write_together(outputs: dict[Path, str]) -> None:
    """Write several texts so that none replaces its predecessor before all of them are on disk."""
    from contextlib import ExitStack

    with ExitStack() as stack:
        for path, text in outputs.items():
            stack.enter_context(replacing(path)).write_bytes(text.encode("utf-8"))


def read_bytes(path: str | Path) -> bytes:
    """Read a whole file; a missing or unreadable one is a `FileError` that says so."""
    try:
        return Path(path).read_bytes()
    except FileNotFoundError as error:
        raise FileError(f"{path} does not exist.") from error
    except OSError as error:
        raise FileError(f"{path} cannot be read: {error.strerror or error}.") from error


def sha256(path: str | Path) -> str:
    """SHA-256 of a file's bytes, in hex."""
    digest = hashlib.sha256()
    try:
        with open(path, "rb") as stream:
            while block := stream.read(1 << 20):
                digest.update(block)
    except OSError as error:
        raise FileError(f"{path} cannot be read: {error.strerror or error}.") from error
    return digest.hexdigest()
