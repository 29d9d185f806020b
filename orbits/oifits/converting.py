"""Converting: a copy of a file as valid version 2, with its history."""

from collections.abc import Sequence
from dataclasses import replace
from importlib.metadata import version
from pathlib import Path

from .conforming import conform
from .model import OIFile
from .validation import Breach, validate
from .writing import write


def convert(
    file: OIFile, path: str | Path, *, notes: Sequence[str] = (), force: bool = False
) -> tuple[OIFile, list[Breach]]:
    """Write `file` as version 2, put right as far as that can be done without its author.

    Parameters
    ----------
    notes : sequence of str
        What was done to the data before, for the history.

    Returns
    -------
    OIFile
        What was written.
    list of Breach
        What the copy still breaks of the checklist for valid files.

    Raises
    ------
    InputError
        If `path` exists and `force` is false, or an id or a text is too long for the standard.
    """
    names = ", ".join(Path(name).name for name in file.files)
    origin = f"Version 2 copy by nodeline {version('nodeline')} of {names}"
    copy = conform(replace(file, history=[*file.history, origin, *notes]))
    write(copy, path, force=force)
    return copy, validate(path)
