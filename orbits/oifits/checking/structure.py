"""Checks of how a file is put together: versions, ids, names."""

from collections import Counter

import numpy as np

from ...problems import Log
from ..model import BaselineTable, OIFile
from ..stars import plain


def revisions(file: OIFile, log: Log) -> None:
    """OI_REVN is there, and that of the file's version."""
    for table in file.tables:
        expected = table.revision if file.version == 2 else 1
        if table.hdu is not None and table.revn is None:
            log.note(table.label, "keyword OI_REVN is missing", f"read as version {file.version}")
        elif table.hdu is not None and table.revn != expected:
            log.suspicious(
                table.label,
                f"OI_REVN is {table.revn}, not {expected} as in a version {file.version} file",
                "read as it stands",
            )


def arrays(file: OIFile, log: Log) -> None:
    """There is an OI_ARRAY, and the tables of data say which is theirs."""
    if not file.arrays:
        say = log.suspicious if file.version == 2 else log.note
        say("", "there is no OI_ARRAY", "stations have no names, their positions are unknown")
        return
    for table in file.data:
        if isinstance(table, BaselineTable) and table.arrname is None and file.version == 2:
            log.suspicious(table.label, "keyword ARRNAME is missing", "stations have no names")


def numbers_from_1(file: OIFile, log: Log) -> None:
    """TARGET_ID and STA_INDEX start at 1."""
    for table, column in [(file.target, "TARGET_ID"), *((a, "STA_INDEX") for a in file.arrays)]:
        if (table[column] < 1).any():
            log.note(table.label, f"column {column} has numbers below 1", "any number will do")


def station_numbers(file: OIFile, log: Log) -> None:
    """Each STA_INDEX is one station of the array."""
    for array in file.arrays:
        twice = [i for i, n in Counter(array.sta_index.tolist()).items() if n > 1]
        if twice:
            log.suspicious(
                array.label, f"STA_INDEX {twice[0]} is given to two stations", "the last is taken"
            )


def stations_of_rows(file: OIFile, log: Log) -> None:
    """Every row is of different stations that the array knows."""
    for table in file.data:
        if table.sta_index is None or not len(table):
            continue
        array = file.array(table.arrname)
        if array is not None:
            unknown = ~np.isin(table.sta_index, array.sta_index)
            if unknown.any():
                log.suspicious(
                    table.label,
                    f"column STA_INDEX: {np.count_nonzero(unknown)} entries, such as "
                    f"{table.sta_index[unknown][0]}, are not in {array.label}",
                    "used without a station's name; u and v are stored",
                )
        if table.sta_index.ndim == 2:
            ordered = np.sort(table.sta_index, axis=1)
            same = (ordered[:, 1:] == ordered[:, :-1]).any(axis=1)
            if same.any():
                log.suspicious(
                    table.label,
                    f"{_rows(same)} the same station twice",
                    "used; u and v are stored",
                )


def names_of_targets(file: OIFile, log: Log) -> None:
    """No target has two ids, and none is without a name."""
    names = [plain(name) for name in file.target.target.tolist()]
    for name, count in Counter(names).items():
        if not name:
            log.note(file.target.label, "a target has no name", "used under the empty name")
        elif count > 1:
            log.note(file.target.label, f"target {name!r} has {count} ids", "taken as one target")


LISTS = {
    "FRAME": {"GEOCENTRIC", "SKY"},
    "AMPTYP": {"ABSOLUTE", "DIFFERENTIAL", "CORRELATED FLUX"},
    "PHITYP": {"ABSOLUTE", "DIFFERENTIAL"},
    "CALSTAT": {"C", "U"},
}


def words(file: OIFile, log: Log) -> None:
    """Keywords that must be one of a few words are."""
    for table in file.tables:
        for name, allowed in LISTS.items():
            value = getattr(table, name.lower(), None)
            if value and value.upper() not in allowed:
                log.note(
                    table.label,
                    f"keyword {name} is {value!r}, not one of {', '.join(sorted(allowed))}",
                    "not used",
                )


def seconds_of_day(file: OIFile, log: Log) -> None:
    """TIME is 0 in version 2."""
    for table in file.data:
        if isinstance(table, BaselineTable) and table.revn == 2 and (table.time != 0).any():
            log.note(table.label, "column TIME is not 0", "ignored; MJD is used")


def foreign_parts(file: OIFile, log: Log) -> None:
    """Columns and extensions that the standard does not know are named."""
    for table in file.tables:
        if table.extra:
            names = ", ".join(table.extra)
            log.note(table.label, f"unknown columns {names}", "kept in copies, otherwise ignored")
    if file.others:
        names = ", ".join(hdu.name or "without a name" for hdu in file.others)
        log.note("", f"other extensions: {names}", "kept in copies, otherwise ignored")


def _rows(which: np.ndarray) -> str:
    """How many rows, and the first, as the start of a sentence."""
    count = np.count_nonzero(which)
    first = int(np.argmax(which)) + 1
    return f"row {first} has" if count == 1 else f"{count} rows (first: row {first}) have"


CHECKS = (
    revisions,
    arrays,
    numbers_from_1,
    station_numbers,
    stations_of_rows,
    names_of_targets,
    words,
    seconds_of_day,
    foreign_parts,
)
