"""How a file is written so that whoever looks never finds half of it, and what is refused before any work is done."""

from __future__ import annotations

import errno
import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from allocator.errors import Fault, InputError


@contextmanager
def written_aside(path: str | Path) -> Iterator[Path]:
    """Yield the name of an empty file beside `path`, which takes its place when the block ends without an error."""
    path = Path(path)
    if not path.parent.is_dir():
        raise FileNotFoundError(errno.ENOENT, "no such folder", str(path.parent))
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.stem}.", suffix=path.suffix)
    os.close(handle)
    aside = Path(name)
    try:
        yield aside
        os.chmod(aside, 0o666 & ~_umask())
        os.replace(aside, path)
    except BaseException:
        aside.unlink(missing_ok=True)
        raise


def refuse_unfit_file(file: Path) -> None:
    """Refuse to write a file where none can be written.

    Raises
    ------
    InputError
        When it is a folder, or its folder does not exist or takes no files.
    """
    if file.is_dir():
        raise InputError([Fault(str(file), "", "a folder", "name a file")])
    if not file.parent.is_dir():
        found = f"no folder {file.parent}"
        raise InputError([Fault(str(file), "", found, "name a file in a folder that exists, or make the folder first")])
    _try_to_write(file.parent, file)


def refuse_unfit_folder(folder: Path) -> None:
    """Refuse to write into a folder, which is made if need be, that can take no files.

    Raises
    ------
    InputError
        When it, or what it would be made in, is a file or takes no files.
    """
    there = next((place for place in (folder, *folder.parents) if place.exists()), folder)
    if not there.is_dir():
        raise InputError([Fault(str(folder), "", f"a file at {there}", "name a folder; it is made if need be")])
    _try_to_write(there, folder)


def _try_to_write(folder: Path, asked: Path) -> None:
    """Only writing tells for certain: permissions can be overruled, by the file system too."""
    try:
        with tempfile.TemporaryFile(dir=folder):
            pass
    except OSError as error:
        found = f"that nothing can be written into {folder} ({error.strerror or error})"
        raise InputError([Fault(str(asked), "", found, "name a place where you may write")]) from None


def _umask() -> int:
    """Return the permissions that new files do not get; it can only be read by setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
