"""Write a file whole or not at all, and never over another one unasked."""

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from .errors import InputError


def refuse_existing(*paths: Path, force: bool) -> None:
    """Raise before any work is done for an output that could not be kept.

    Raises
    ------
    InputError
        If one of `paths` exists and `force` is false, or nothing can be written to its folder.
        A folder that is missing will be made.
    """
    for path in paths:
        if path.exists() and not force:
            raise InputError(f"{path} exists already; give another name, or --force to replace it")
        folder = next(parent for parent in path.absolute().parents if parent.exists())
        if not folder.is_dir() or not os.access(folder, os.W_OK):
            what = "is a file" if folder.is_file() else "cannot be written to"
            raise InputError(f"{path}: {folder} {what}; choose another folder")


@contextmanager
def whole_file(path: Path, *, force: bool = False) -> Iterator[Path]:
    """Yield a temporary name beside `path` that takes its place when the block ends well.

    The temporary name keeps the suffix of `path`, since many writers choose their format by it.
    An exception, Ctrl-C included, removes the temporary file and leaves `path` untouched.

    Raises
    ------
    InputError
        If `path` exists and `force` is false, at the start or when the block ends.
    """
    path = Path(path)
    refuse_existing(path, force=force)
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, name = tempfile.mkstemp(
        prefix=f".{path.stem}-", suffix="".join(path.suffixes[-1:]), dir=path.parent
    )
    os.close(handle)
    temporary = Path(name)
    try:
        yield temporary
        mask = os.umask(0)
        os.umask(mask)
        temporary.chmod(0o666 & ~mask)  # mkstemp makes private files; results are to be shared
        refuse_existing(path, force=force)
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)
