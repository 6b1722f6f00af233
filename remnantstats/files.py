"""Files written whole or not at all: a temporary sibling, then a rename."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from .errors import Fault, InputError

__all__ = ["atomic_path", "make_folder", "write_bytes", "write_text"]


@contextmanager
def atomic_path(path: Path) -> Iterator[Path]:
    """Give a temporary name beside `path`; what is written there takes the name `path` on success.

    The temporary name keeps the ending of `path`, for libraries that choose a format by it. On failure nothing is
    left behind and an earlier file of that name stays as it was.

    Parameters
    ----------
    path : pathlib.Path
        The file to write. Missing folders are made.

    Yields
    ------
    pathlib.Path
        The temporary name. It does not exist yet.

    Raises
    ------
    InputError
        Where the system refuses: full disk, read-only folder, a folder in the file's place.
    """
    make_folder(path.parent)
    temporary = path.with_name(f".{path.stem[:80]}-{secrets.token_hex(4)}{path.suffix}")
    try:
        yield temporary
        _flush(temporary)
        temporary.replace(path)
    except OSError as error:
        raise _refused(path, error) from error
    finally:
        _remove(temporary)


def write_text(path: Path, text: str) -> None:
    """Write text as UTF-8, line ends as they are, whole or not at all.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    text : str
        Its content.

    Raises
    ------
    InputError
        Where the system refuses.
    """
    write_bytes(path, text.encode("utf-8"))


def write_bytes(path: Path, content: bytes) -> None:
    """Write bytes, whole or not at all.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    content : bytes
        Its content.

    Raises
    ------
    InputError
        Where the system refuses.
    """
    with atomic_path(path) as temporary:
        temporary.write_bytes(content)


def make_folder(folder: Path) -> None:
    """Make a folder and its parents, where missing.

    Parameters
    ----------
    folder : pathlib.Path
        The folder.

    Raises
    ------
    InputError
        Where the system refuses, or a file has that name.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise _refused(folder, error) from error


def _flush(path: Path) -> None:
    # without it a crash just after the rename can leave the final name on an empty file
    with path.open("rb+") as handle:
        os.fsync(handle.fileno())


def _remove(path: Path) -> None:
    # a disk that has failed may refuse this as well; the first error is the one to tell
    try:
        path.unlink(missing_ok=True)
    except OSError:
        return


def _refused(path: Path, error: OSError) -> InputError:
    return InputError(
        Fault(
            "this could not be written",
            where=str(path),
            found=error.strerror or str(error),
            allowed="a place with free space where you may write",
            remedy="free some space, or choose another directory ([output] directory, or --out)",
        )
    )
