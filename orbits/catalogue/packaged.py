"""The catalogues that come with Nodeline, in a checkout and in an installed package."""

from pathlib import Path

from ..errors import InputError
from .entry import Entry
from .table import Catalogue

_PACKAGE = Path(__file__).resolve().parents[1]


def packaged_catalogues() -> dict[str, Path]:
    """Name and file of each catalogue that comes along.

    A wheel carries them inside the package; in a checkout they are its folder ``catalogs``.
    """
    for folder in (_PACKAGE / "catalogs", _PACKAGE.parent / "catalogs"):
        if folder.is_dir():
            return {path.stem: path for path in sorted(folder.glob("*.ecsv"))}
    return {}


def catalogue_file(name: str | None) -> list[Path]:
    """The file called `name`, else the packaged catalogue of that name; None means all of these.

    Raises
    ------
    InputError
        If there is neither.
    """
    known = packaged_catalogues()
    if name is None:
        return list(known.values())
    if Path(name).is_file():
        return [Path(name)]
    if name in known:
        return [known[name]]
    raise InputError(f"{name}: no such file, nor a catalogue that comes along: {', '.join(known)}")


def find_entry(name: str, catalogue: str | None = None) -> Entry:
    """The entry of that name in the catalogue called so, or in the first that comes along.

    Raises
    ------
    InputError
        If no catalogue has it.
    """
    return find_solutions(name, catalogue)[0]


def find_solutions(name: str, catalogue: str | None = None) -> list[Entry]:
    """All solutions of the system of that name, the preferred one first; as `find_entry`."""
    files = catalogue_file(catalogue)
    if len(files) == 1:
        return Catalogue.read(files[0]).solutions(name)
    for file in files:
        part = Catalogue.read(file)
        if part.knows(name):
            return part.solutions(name)
    raise InputError(
        f"no entry {name!r} in {', '.join(file.name for file in files)}; "
        "name another file with --catalogue"
    )
