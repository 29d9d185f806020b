"""The catalogue: a table of orbits, several solutions of a system side by side."""

from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Self

import numpy as np
from astropy.table import Table, vstack

from ..bundle import Orbits
from ..errors import InputError
from ..files import whole_file
from ..tables import read_table
from .columns import COLUMNS, NUMBERS, TEXTS, WITH_ERRORS, check, same, truth
from .entry import Entry

_TRUTHS = ("preferred", "ascending")


class Catalogue:
    """Orbits of binaries, one row per solution, over an astropy Table.

    Parameters
    ----------
    table : Table
        Columns as in `orbits.catalogue.columns`, numbers in the units named there.
    path : Path
        Where it came from: the name in messages and the folder of the files that it mentions.

    Raises
    ------
    InputError
        If the table is no catalogue; the message names row and column.
    """

    def __init__(self, table: Table, path: Path = Path("catalogue")) -> None:
        check(path, table)
        self.path = path
        self._table = table
        self._preferred = truth(path, table, "preferred")
        self._ascending = truth(path, table, "ascending")

    @classmethod
    def read(cls, path: Path) -> Self:
        """Read a catalogue from ECSV; raises InputError where the file cannot be one."""
        path = Path(path)
        return cls(read_table(path, COLUMNS), path)

    @classmethod
    def of(cls, entries: Sequence[Entry], path: Path = Path("catalogue")) -> Self:
        """A catalogue of the given entries."""
        return cls(_table_of(entries), path)

    def __len__(self) -> int:
        return len(self._table)

    def __iter__(self) -> Iterator[Entry]:
        return (self.entry(row) for row in range(len(self)))

    @property
    def table(self) -> Table:
        """A copy of the table, with units, and without columns that say nothing."""
        copy = Table(meta=dict(self._table.meta))
        for name in self._table.colnames:
            values = self._table[name]
            if name in _TRUTHS:
                copy[name] = truth(self.path, self._table, name)
            elif name in TEXTS:
                if any(values):
                    copy[name] = np.asarray(values).astype(str)
            elif np.isfinite(values).any():
                copy[name] = np.array(values)
                copy[name].unit = NUMBERS[name.removesuffix("_error")]
        return copy

    def column(self, name: str) -> np.ndarray:
        """(n,) values of one column; "" or NaN where nothing is known."""
        if name in self._table.colnames:
            return np.asarray(self._table[name])
        if name in TEXTS:
            return np.full(len(self), "", dtype=object)
        return np.full(len(self), np.nan)

    def entry(self, row: int) -> Entry:
        """The entry of a row, counted from 0."""
        line = self._table[row]
        names = self._table.colnames
        texts = {n: line[n] for n in TEXTS if n in names and n not in ("aliases", *_TRUTHS)}
        aliases = line["aliases"] if "aliases" in names else ""
        return Entry(
            **texts,
            aliases=tuple(alias.strip() for alias in aliases.split(";") if alias.strip()),
            preferred=bool(self._preferred[row]),
            ascending=bool(self._ascending[row]),
            numbers={name: float(line[name]) for name in names if name not in TEXTS},
            folder=self.path.parent,
        )

    def knows(self, name: str) -> bool:
        """Whether a system goes by that name or alias (or has it before a slash)."""
        return bool(self._rows_named(same(name.partition("/")[0])))

    def solutions(self, name: str) -> list[Entry]:
        """All solutions of the system of that name or alias, the preferred one first.

        ``system/solution`` names a single one.

        Raises
        ------
        InputError
            If there is none, or if the alias belongs to several systems.
        """
        system, _, solution = (same(part) for part in name.partition("/"))
        rows = self._rows_named(system)
        systems = {same(self.column("system")[row]): self.column("system")[row] for row in rows}
        if system in systems:  # a system's own name wins over an alias of another
            rows = [row for row in rows if same(self.column("system")[row]) == system]
        elif len(systems) > 1:
            raise InputError(
                f"{self.path}: {name!r} may be {' or '.join(sorted(systems.values()))}"
            )
        if solution:
            rows = [row for row in rows if same(self.column("solution")[row]) == solution]
        if not rows:
            raise InputError(f"{self.path}: no entry {name!r}{self._suggestion(system)}")
        return [self.entry(row) for row in sorted(rows, key=self._rank)]

    def find(self, name: str) -> Entry:
        """The entry ``system/solution``, or the preferred solution of a system or alias.

        Where none is preferred it is the one with the latest date, and of those the first.
        """
        return self.solutions(name)[0]

    def select(
        self,
        *,
        match: str | None = None,
        near: tuple[float, float, float] | None = None,
        period: tuple[float, float] | None = None,
        separation: tuple[float, float] | None = None,
        mjd: float | None = None,
        preferred: bool = False,
    ) -> "Catalogue":
        """The rows that fulfil all of the conditions given.

        Parameters
        ----------
        match : str
            Part of a name or alias; case and spaces do not count.
        near : (ra, dec, radius)
            Circle on the sky, deg.
        period : (shortest, longest)
            d.
        separation : (smallest, greatest)
            mas, at the time `mjd` (TDB), which must be given with it.
        preferred : bool
            Only one solution of each system: the one that `find` would give.
        """
        keep = np.ones(len(self), dtype=bool)
        if match is not None:
            keep &= self._matching(same(match))
        if near is not None:
            keep &= _distance(self.column("ra"), self.column("dec"), *near[:2]) <= near[2]
        if period is not None:
            values = self.column("period")
            keep &= (values >= period[0]) & (values <= period[1])
        if separation is not None:
            if mjd is None:
                raise ValueError("a separation is asked for without the time mjd")
            x, y = self.orbits().offsets(np.array([mjd]))
            values = np.hypot(x, y)[:, 0]
            keep &= (values >= separation[0]) & (values <= separation[1])
        if preferred:
            keep &= self._favourites()
        return self._rows(keep)

    def orbits(self) -> Orbits:
        """The orbits of all rows."""
        return Orbits.of({name: self.column(name) for name in Orbits.names()})

    def with_entries(self, entries: Sequence[Entry]) -> "Catalogue":
        """This catalogue with more rows; an added preferred solution takes over.

        Raises
        ------
        InputError
            If a solution of that name is there already.
        """
        there = set(
            zip(map(same, self.column("system")), map(same, self.column("solution")), strict=True)
        )
        for entry in entries:
            if (same(entry.system), same(entry.solution)) in there:
                raise InputError(
                    f"{self.path}: {entry.key} is there already; give the solution another name"
                )
        table = self._table.copy()
        taken = {same(entry.system) for entry in entries if entry.preferred}
        if "preferred" in table.colnames:
            table["preferred"] = np.array(
                [
                    "" if same(system) in taken else text
                    for system, text in zip(table["system"], table["preferred"], strict=True)
                ],
                dtype=object,
            )
        both = vstack([table, _table_of(entries)], metadata_conflicts="silent")
        for name in both.colnames:
            if name in TEXTS:
                both[name] = np.array(
                    ["" if t is np.ma.masked else t for t in both[name]], dtype=object
                )
            else:
                both[name] = np.ma.filled(np.ma.asarray(both[name], dtype=float), np.nan)
        order = [column.name for column in COLUMNS if column.name in both.colnames]
        return Catalogue(both[order], self.path)

    def write(self, path: Path, *, force: bool = False) -> None:
        """Write the catalogue as ECSV, whole or not at all."""
        with whole_file(path, force=force) as temporary:
            self.table.write(temporary, format="ascii.ecsv", overwrite=True)

    def _rows(self, keep: np.ndarray) -> "Catalogue":
        return Catalogue(self._table[keep], self.path)

    def _rank(self, row: int) -> tuple:
        """Sorts the solutions of a system: preferred, then the latest, then as they stand."""
        date = self.column("date")[row]
        return (not self._preferred[row], tuple(-ord(letter) for letter in date) or (0,), row)

    def _favourites(self) -> np.ndarray:
        best: dict[str, int] = {}
        for row, system in enumerate(self.column("system")):
            key = same(system)
            if key not in best or self._rank(row) < self._rank(best[key]):
                best[key] = row
        keep = np.zeros(len(self), dtype=bool)
        keep[list(best.values())] = True
        return keep

    def _names(self) -> Iterator[list[str]]:
        """For each row, all names it goes by, as they are compared."""
        for system, aliases in zip(self.column("system"), self.column("aliases"), strict=True):
            yield [same(system), *(same(alias) for alias in aliases.split(";") if alias.strip())]

    def _rows_named(self, name: str) -> list[int]:
        return [row for row, names in enumerate(self._names()) if name in names]

    def _matching(self, part: str) -> np.ndarray:
        return np.array([any(part in name for name in names) for names in self._names()], bool)

    def _suggestion(self, system: str) -> str:
        from difflib import get_close_matches

        names = {same(name): name for name in self.column("system")}
        close = get_close_matches(system, names, n=3)
        return f"; did you mean {' or '.join(names[name] for name in close)}?" if close else ""


def add_entries(path: Path, entries: Sequence[Entry]) -> Catalogue:
    """Add entries to the catalogue file `path`, which is made where there is none.

    The file is locked meanwhile and replaced as a whole, so that of two processes adding at the
    same time neither loses an entry and no reader sees half a file.

    Raises
    ------
    InputError
        If the file is no catalogue, or has a solution of that name already.
    """
    path = Path(path)
    with _locked(path):
        if path.exists():
            catalogue = Catalogue.read(path).with_entries(entries)
        else:
            catalogue = Catalogue.of(entries, path)
        catalogue.write(path, force=True)
    return catalogue


@contextmanager
def _locked(path: Path) -> Iterator[None]:
    """Hold the right to change `path`; the lock of a process that dies is freed by the system."""
    import fcntl

    path.parent.mkdir(parents=True, exist_ok=True)
    with open(path.with_name(f".{path.name}.lock"), "w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        yield


def _table_of(entries: Iterable[Entry]) -> Table:
    """The table of some entries, with the columns that at least one of them fills."""
    entries = list(entries)
    table = Table()
    for name in TEXTS:
        values = [getattr(entry, name) for entry in entries]
        if name == "aliases":
            values = ["; ".join(value) for value in values]
        if name in _TRUTHS:
            values = [str(value).lower() for value in values]
        if name in ("system", "solution") or any(values):
            table[name] = np.array(values, dtype=object)
    for name in NUMBERS:
        for ending in ("", "_error") if name in WITH_ERRORS else ("",):
            values = np.array([entry.number(name + ending) for entry in entries])
            if np.isfinite(values).any():
                table[name + ending] = values
    return table


def _distance(ra: np.ndarray, dec: np.ndarray, ra0: float, dec0: float) -> np.ndarray:
    """Angle on the sky, deg, by the haversine, which keeps its digits for small angles."""
    ra, dec, ra0, dec0 = (np.radians(v) for v in (ra, dec, ra0, dec0))
    half = np.sin((dec - dec0) / 2) ** 2 + np.cos(dec) * np.cos(dec0) * np.sin((ra - ra0) / 2) ** 2
    return np.degrees(2 * np.arcsin(np.minimum(np.sqrt(half), 1.0)))
