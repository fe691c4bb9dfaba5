"""Writing files so that nothing the user made is ever overwritten or left half written."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from planner.errors import OutputExistsError


def refuse_existing(path: str | Path, force: bool = False) -> Path:
    """Return the path, or refuse it before any work starts when a file stands there.

    Raises OutputExistsError unless `force`.
    """
    path = Path(path)
    if path.exists() and not force:
        raise OutputExistsError(path)
    return path


@contextmanager
def whole_file(path: str | Path, force: bool = False) -> Iterator[Path]:
    """Give a temporary name beside `path`, renamed to it only when the block ends without an error.

    The temporary name keeps the suffix, so that libraries which choose a format by it work.
    Raises OutputExistsError when `path` exists and not `force`, at the start and again before renaming.
    """
    path = refuse_existing(path, force)
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, name = tempfile.mkstemp(prefix=".part-", suffix=path.suffix, dir=path.parent)
    os.close(handle)
    part = Path(name)
    try:
        yield part
        refuse_existing(path, force)
        umask = os.umask(0)
        os.umask(umask)
        part.chmod(0o666 & ~umask)
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)
