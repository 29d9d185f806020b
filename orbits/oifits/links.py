"""Links between the tables of one file: names and ids resolved, once, when it is read."""

from dataclasses import replace
from pathlib import Path
from typing import TypeVar

import numpy as np

from ..errors import InputError
from ..problems import Log, Severity
from .header import Header
from .model import (
    Array,
    Corr,
    DataTable,
    Inspol,
    OIFile,
    OtherHDU,
    Target,
    Wavelength,
)
from .schema import Table, columns, keywords
from .stars import SAME_PLACE, Stars, places, plain

T = TypeVar("T", bound=Table)


def assemble(
    path: Path, header: Header, tables: list[Table], others: list[OtherHDU], log: Log
) -> OIFile:
    """An `OIFile` of the tables that were read, with every link that can be resolved.

    Data tables whose target or spectral set-up is unknown are left out.

    Raises
    ------
    InputError
        If no OI_TARGET, no OI_WAVELENGTH or no table of data is usable.
    """
    target = _target(path, [t for t in tables if isinstance(t, Target)], log)
    wavelengths = _unique([t for t in tables if isinstance(t, Wavelength)], "insname", log)
    arrays = _unique([t for t in tables if isinstance(t, Array)], "arrname", log)
    correlations = _unique([t for t in tables if isinstance(t, Corr)], "corrname", log)
    if not wavelengths:
        raise InputError(f"{path}: no usable OI_WAVELENGTH table, so no datum has a wavelength")
    data = []
    for table in tables:
        if isinstance(table, DataTable) and _linked(table, wavelengths, arrays, correlations, log):
            rows = _rows_of_known_targets(table, target, log)
            if len(rows):
                data.append(rows)
    if not data:
        raise InputError(
            f"{path}: no usable table of data (OI_VIS2, OI_T3, OI_VIS or OI_FLUX)" + _because(log)
        )
    return OIFile(
        target=target,
        wavelengths=wavelengths,
        data=data,
        arrays=arrays,
        correlations=correlations,
        polarisations=[
            _rows_of_known_targets(t, target, log) for t in tables if isinstance(t, Inspol)
        ],
        primary=_primary(header),
        history=_lines(header, "HISTORY"),
        comments=_lines(header, "COMMENT"),
        others=others,
        version=2 if header.text("CONTENT").upper() == "OIFITS2" else 1,
        files=(str(path),),
        problems=log.problems,
    )


def _because(log: Log) -> str:
    """The last thing that was left out, as the reason of an error."""
    left_out = [p for p in log.problems if p.severity == Severity.UNUSABLE]
    return f": {left_out[-1].table}: {left_out[-1].what}" if left_out else ""


def _target(path: Path, tables: list[Target], log: Log) -> Target:
    if not tables:
        raise InputError(f"{path}: no usable OI_TARGET table{_because(log)}")
    table = tables[0]
    for other in tables[1:]:
        log.suspicious(other.label, "a second OI_TARGET table", f"only {table.label} is used")
    if not len(table):
        raise InputError(f"{path}: {table.label} has no rows")
    keep = np.ones(len(table), dtype=bool)
    first: dict[int, int] = {}
    where = places(table)
    for row, number in enumerate(table.target_id.tolist()):
        known = first.setdefault(number, row)
        if known == row:
            continue
        one, two = str(table.target[known]), str(table.target[row])
        if plain(one) != plain(two):
            raise InputError(
                f"{path}: {table.label}: TARGET_ID {number} is both {one!r} and {two!r}"
            )
        keep[row] = False
        away = where[known].away(where[row]) or 0.0
        if away >= SAME_PLACE:
            what = f"TARGET_ID {number} appears twice, {away:.3g} deg apart"
            log.suspicious(table.label, what, "the first is used")
        else:
            log.note(table.label, f"TARGET_ID {number} appears twice", "one row is kept")
    return _told_apart(table if keep.all() else table.select(keep), log)


def _told_apart(table: Target, log: Log) -> Target:
    """The targets with names that no two stars share."""
    stars = Stars()
    given = [
        stars.name(name, place)
        for name, place in zip(table.target.tolist(), places(table), strict=True)
    ]
    for wanted, (name, away) in zip(table.target.tolist(), given, strict=True):
        if away:
            what = f"two targets {wanted!r} are {away:.3g} deg apart"
            log.suspicious(table.label, what, f"the second is called {name!r}")
    return replace(table, target=np.array([name for name, _ in given], dtype=str))


def mapped(ids: np.ndarray, new: dict[int, int]) -> np.ndarray:
    """`ids` with those that `new` knows replaced; the others stay."""
    old, where = np.unique(ids, return_inverse=True)
    values = np.array([new.get(number, number) for number in old.tolist()], dtype=ids.dtype)
    return values[where].reshape(ids.shape)


def _unique(tables: list[T], key: str, log: Log) -> list[T]:
    """Tables of which no two have the same name; of equal ones the first."""
    kept: dict[str, T] = {}
    ambiguous: set[str] = set()
    for table in tables:
        name = getattr(table, key)
        if name not in kept:
            kept[name] = table
        elif same_content(kept[name], table):
            log.note(table.label, f"{key.upper()} {name!r} appears twice, alike", "one is kept")
        else:
            ambiguous.add(name)
            log.unusable(
                table.label,
                f"{key.upper()} {name!r} appears twice with other contents",
                "what refers to it is left out",
            )
    return [table for name, table in kept.items() if name not in ambiguous]


def same_content(a: Table, b: Table) -> bool:
    """Whether two tables of one kind are equal, but perhaps for their name."""
    if any(a[k.name] != b[k.name] for k in keywords(type(a)) if not k.name.endswith("NAME")):
        return False
    for column in columns(type(a)):
        x, y = a[column.name], b[column.name]
        if (x is None) != (y is None):
            return False
        if x is not None and not np.array_equal(x, y, equal_nan=column.code in "EDC"):
            return False
    return True


def _linked(table, wavelengths, arrays, correlations, log: Log) -> bool:
    """Resolve the names that a table of data refers to; whether it can be used."""
    name = _match(table.insname, [w.insname for w in wavelengths])
    if name is None:
        known = ", ".join(repr(w.insname) for w in wavelengths)
        log.unusable(
            table.label,
            f"INSNAME {table.insname!r} has no OI_WAVELENGTH (there are {known})",
            "the table is left out",
        )
        return False
    if name != table.insname:
        log.note(table.label, f"INSNAME is {table.insname!r}, not {name!r}", "taken as the same")
        table.insname = name
    nwave = len(next(w for w in wavelengths if w.insname == name))
    if table.flag.shape[1] != nwave:
        log.unusable(
            table.label,
            f"it has {table.flag.shape[1]} channels, the OI_WAVELENGTH {name!r} has {nwave}",
            "the table is left out",
        )
        return False
    if table.arrname is None and len(arrays) == 1 and table.sta_index is not None:
        table.arrname = arrays[0].arrname  # version 1 may leave out what is clear
    for key, known in (
        ("arrname", [a.arrname for a in arrays]),
        ("corrname", [c.corrname for c in correlations]),
    ):
        wanted = getattr(table, key)
        if wanted is None:
            continue
        found = _match(wanted, known)
        if found is None:
            log.suspicious(
                table.label,
                f"{key.upper()} {wanted!r} has no table",
                "stations have no names"
                if key == "arrname"
                else "its data are taken as independent",
            )
        setattr(table, key, found)
    return True


def _match(wanted: str, known: list[str]) -> str | None:
    """The known name that `wanted` means: the same, or the only one alike but for case, blanks."""
    if wanted in known:
        return wanted
    alike = [name for name in known if plain(name) == plain(wanted)]
    return alike[0] if len(alike) == 1 else None


def _rows_of_known_targets(table: T, target: Target, log: Log) -> T:
    known = np.isin(table.target_id, target.target_id)
    if known.all():
        return table
    unknown = sorted({int(i) for i in table.target_id[~known]})
    log.unusable(
        table.label,
        f"{np.count_nonzero(~known)} rows have TARGET_ID {', '.join(map(str, unknown[:5]))}, "
        "which OI_TARGET does not know",
        "these rows are left out",
    )
    return table.select(known)


def _primary(header: Header) -> dict[str, object]:
    """The keywords of the primary header that say something about the data."""
    skip = {"SIMPLE", "BITPIX", "EXTEND", "CHECKSUM", "DATASUM", "COMMENT", "HISTORY"}
    return {
        name: value
        for name, value, _ in header.cards
        if name not in skip and not name.startswith("NAXIS")
    }


def _lines(header: Header, keyword: str) -> list[str]:
    return [str(value) for name, value, _ in header.cards if name == keyword]
