"""Pieces of a fit: kept when finished, so that an interrupted fit need not begin again.

A piece is a dataclass of arrays and plain numbers in one NumPy file, read without pickle. It lies
in a folder named after a hash of all that the piece depends on: data, model, priors, settings,
random numbers and versions. Whatever changes, the folder is another and nothing stale is used.
"""

import hashlib
import time
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

import numpy as np

from ..files import whole_file
from ..provenance import versions

T = TypeVar("T")
ABANDONED = 7 * 86400.0
"""Age in seconds of the newest piece at which nobody is thought to continue a fit."""


class Forgotten:
    """Keeps nothing: the default of the library."""

    continued = False
    """Whether pieces of this fit were there before it began."""

    def of(self, fingerprint: str) -> "Forgotten":
        """The pieces of the fit that has this fingerprint."""
        return self

    def take(self, name: str, kind: type[T], make: Callable[[], T]) -> T:
        """The piece `name`, made unless it is there already."""
        return make()

    def tell(self, text: str) -> None:
        """Say to a person what becomes of the pieces."""


class Kept(Forgotten):
    """Keeps pieces in `folder` until `clear`; `hear` is told which are found there."""

    def __init__(self, folder: Path, hear: Callable[[str], None] = lambda text: None) -> None:
        self.folder, self.hear = Path(folder), hear
        self.taken: set[str] = set()

    def tell(self, text: str) -> None:
        """Say to a person what becomes of the pieces."""
        self.hear(text)

    def of(self, fingerprint: str) -> "Kept":
        """The pieces of the fit that has this fingerprint."""
        self.taken.add(fingerprint)
        mine = Kept(self.folder / fingerprint, self.hear)
        found = len(list(mine.folder.glob("[!.]*.npz")))
        if found:
            mine.continued = True
            pieces = "1 piece" if found == 1 else f"{found} pieces"
            self.tell(f"continuing an interrupted fit from {pieces} of it, kept in {mine.folder}")
        return mine

    def take(self, name: str, kind: type[T], make: Callable[[], T]) -> T:
        """The piece `name`, made and kept unless it can be read."""
        path = self.folder / f"{name}.npz"
        piece = _read(path, kind)
        if piece is None:
            piece = make()
            with whole_file(path, force=True) as temporary:
                np.savez(temporary, **vars(piece))
        return piece

    def clear(self) -> None:
        """Remove the pieces of all fits that were asked for here, and of those left long ago.

        Another process may be at a fit of its own in the same folder, which goes if it is empty.
        """
        now = time.time()
        for folder in self.folder.glob("*/"):
            if folder.name in self.taken or now - folder.stat().st_mtime > ABANDONED:
                for path in folder.glob("*.npz"):  # half-written ones too
                    path.unlink()
                _remove_empty(folder)
        _remove_empty(self.folder)


FORGOTTEN = Forgotten()


def _remove_empty(folder: Path) -> None:
    if folder.is_dir() and not any(folder.iterdir()):
        folder.rmdir()


def _read(path: Path, kind: type[T]) -> T | None:
    """The piece, or None if there is none of this kind."""
    try:
        with open(path, "rb") as stream, np.load(stream, allow_pickle=False) as stored:
            values = {name: stored[name] for name in stored.files}
        return kind(**{name: v if v.ndim else v.item() for name, v in values.items()})
    except (OSError, ValueError, TypeError, EOFError, zipfile.BadZipFile):
        return None


def fingerprint(*parts: object) -> str:
    """Twenty hexadecimal digits that stand for `parts` and the versions of all packages.

    A part is an array, a tuple of parts, or anything else with a telling `repr`.
    """
    digest = hashlib.sha256()
    for part in [*parts, versions()]:
        digest.update(_bytes(part))
        digest.update(b"|")
    return digest.hexdigest()[:20]


def _bytes(part: object) -> bytes:
    if isinstance(part, np.ndarray):
        return f"{part.dtype} {part.shape} ".encode() + np.ascontiguousarray(part).tobytes()
    if isinstance(part, tuple):
        return b",".join(_bytes(item) for item in part)
    return repr(part).encode()
