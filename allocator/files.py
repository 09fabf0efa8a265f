"""How a file is written so that whoever looks never finds half of it: aside, then moved into place."""

from __future__ import annotations

import errno
import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path


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


def _umask() -> int:
    """Return the permissions that new files do not get; it can only be read by setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
