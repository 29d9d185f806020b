"""Joining: several files as one, clashes of names and ids resolved by content, not by number."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from .links import mapped, plain, same_content
from .model import Array, OIFile, Target, Wavelength
from .schema import Table, attribute, columns


def join(files: Sequence[OIFile]) -> OIFile:
    """One `OIFile` with all tables of `files`.

    Targets of one name (but for case and blanks) become one. Spectral set-ups, arrays and
    correlations that share a name but differ are told apart by a number after the name.
    """
    if len(files) == 1:
        return files[0]
    target, ids = _targets(files)
    wavelengths: dict[str, Wavelength] = {}
    arrays: dict[str, Array] = {}
    correlations: dict[str, Table] = {}
    data, polarisations, others, history, comments = [], [], [], [], []
    for number, file in enumerate(files):
        insnames = {w.insname: _place(w, "insname", wavelengths) for w in file.wavelengths}
        arrnames = {a.arrname: _place(a, "arrname", arrays) for a in file.arrays}
        corrnames = {
            c.corrname: _place(c, "corrname", correlations, share=False) for c in file.correlations
        }
        for table in file.data:
            data.append(
                replace(
                    table,
                    target_id=mapped(table.target_id, ids[number]),
                    insname=insnames[table.insname],
                    arrname=arrnames.get(table.arrname),
                    corrname=corrnames.get(table.corrname),
                )
            )
        for table in file.polarisations:
            names = [insnames.get(name, name) for name in table.insname.tolist()]
            polarisations.append(
                replace(
                    table,
                    target_id=mapped(table.target_id, ids[number]),
                    insname=np.array(names, dtype=str),
                    arrname=arrnames.get(table.arrname, table.arrname),
                )
            )
        others += file.others
        history += [line for line in file.history if line not in history]
        comments += [line for line in file.comments if line not in comments]
    return OIFile(
        target=target,
        wavelengths=list(wavelengths.values()),
        data=data,
        arrays=list(arrays.values()),
        correlations=list(correlations.values()),
        polarisations=polarisations,
        primary=_shared([file.primary for file in files]),
        history=history,
        comments=comments,
        others=others,
        version=max(file.version for file in files),
        files=tuple(name for file in files for name in file.files),
        problems=[problem for file in files for problem in file.problems],
    )


def _targets(files: Sequence[OIFile]) -> tuple[Target, list[dict[int, int]]]:
    """One table of all targets, and for each file the new id of each of its ids."""
    numbers: dict[str, int] = {}
    maps: list[dict[int, int]] = []
    parts: list[Target] = []
    for file in files:
        names = [plain(name) for name in file.target.target.tolist()]
        fresh = [n not in numbers and n not in names[:i] for i, n in enumerate(names)]
        for name in names:
            numbers.setdefault(name, len(numbers) + 1)
        maps.append({int(i): numbers[n] for i, n in zip(file.target.target_id, names, strict=True)})
        parts.append(file.target.select(np.array(fresh, dtype=bool)))
    joined: dict[str, np.ndarray | None] = {}
    for column in columns(Target):
        values = [part[column.name] for part in parts]
        known = [value for value in values if value is not None]
        if len(known) < len(values):  # CATEGORY, given by some files only
            values = [
                np.full(len(p), "") if v is None else v for p, v in zip(parts, values, strict=True)
            ]
        joined[attribute(column.name)] = np.concatenate(values) if known else None
    joined["target_id"] = np.arange(1, len(numbers) + 1)
    return Target(**joined, cards=parts[0].cards), maps


def _place(table: Table, key: str, placed: dict[str, Table], *, share: bool = True) -> str:
    """Put `table` among those `placed`, under a free name unless an equal one is there already."""
    name = wanted = getattr(table, key)
    number = 1
    while name in placed:
        if share and same_content(placed[name], table):
            return name
        number += 1
        name = f"{wanted}_{number}"
    placed[name] = table if name == wanted else replace(table, **{key: name})
    return name


def _shared(headers: Sequence[dict[str, object]]) -> dict[str, object]:
    """The keywords on which all headers agree."""
    first, *rest = headers
    return {k: v for k, v in first.items() if all(other.get(k) == v for other in rest)}
