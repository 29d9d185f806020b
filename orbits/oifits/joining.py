"""Joining: several files as one, clashes of names and ids resolved by content, not by number."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from ..problems import Log
from .links import mapped, same_content
from .model import Array, OIFile, Target, Wavelength
from .schema import Table, attribute, columns
from .stars import Stars, places, plain


def join(files: Sequence[OIFile]) -> OIFile:
    """One `OIFile` with all tables of `files`.

    Targets of one name (but for case and blanks) become one, unless they stand at different
    places. Those, and spectral set-ups, arrays and correlations that share a name but differ, are
    told apart by a number after the name.
    """
    if len(files) == 1:
        return files[0]
    log = Log(", ".join(name for file in files for name in file.files))
    target, ids = _targets(files, log)
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
        clashes=log.problems,
    )


def _targets(files: Sequence[OIFile], log: Log) -> tuple[Target, list[dict[int, int]]]:
    """One table of all targets, and for each file the new id of each of its ids."""
    stars = Stars()
    numbers: dict[str, int] = {}
    maps: list[dict[int, int]] = []
    parts: list[Target] = []
    for file in files:
        names, fresh, ids = [], [], []
        for wanted, place in zip(file.target.target.tolist(), places(file.target), strict=True):
            name, away = stars.name(wanted, place)
            names.append(name)
            fresh.append(plain(name) not in numbers)
            ids.append(numbers.setdefault(plain(name), len(numbers) + 1))
            if away:
                what = f"target {wanted!r} of {file.source} is {away:.3g} deg from that of others"
                log.suspicious(Target.extname, what, f"taken as another star, {name!r}")
        maps.append(dict(zip(file.target.target_id.tolist(), ids, strict=True)))
        table = replace(file.target, target=np.array(names, dtype=str))
        parts.append(table.select(np.array(fresh, dtype=bool)))
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
    return Target(**joined, **_foreign([p for p in parts if len(p)] or parts[:1], log)), maps


def _foreign(parts: Sequence[Target], log: Log) -> dict[str, object]:
    """What the standard does not know of the tables: cards of the first, columns that all have."""
    forms = [{name: extra.cards for name, extra in part.extra.items()} for part in parts]
    names = dict.fromkeys(name for form in forms for name in form)
    # Columns of varying length point into their own table.
    simple = len(parts) == 1 or not any(part.heap for part in parts)
    kept = [n for n in names if simple and all(form.get(n) == forms[0].get(n) for form in forms)]
    lost = [name for name in names if name not in kept]
    if lost:
        what = f"the unknown columns {', '.join(lost)} are not the same in all files"
        log.note(Target.extname, what, "left out of what is joined")
    first = parts[0]
    extra = {
        name: replace(first.extra[name], raw=np.concatenate([p.extra[name].raw for p in parts]))
        for name in kept
    }
    return {"extra": extra, "heap": first.heap if simple else b"", "cards": first.cards}


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
