"""The checklist for a valid OIFITS 2 file, applied to the bytes of a file.

It looks at the file as a stranger would, without the leniency of the reader. Each function is one
item of the list. Grades: "error", the file is not OIFITS 2; "warning", it is, but invites
trouble; "advice", it breaks a rule that the standard leaves unsaid.
"""

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from .bintable import BinTable, Field, Malformed
from .blocks import read_hdus
from .checksum import verify
from .correlation import first_of_pairs
from .model import KINDS, T3, DataTable, Vis, Vis2
from .observables import LONGEST_WAVE, SHORTEST_WAVE
from .schema import NWAVE, OPEN, Column, Table, columns, keywords

ERROR, WARNING, ADVICE = "error", "warning", "advice"
OLD = ("OI_TARGET", "OI_ARRAY", "OI_WAVELENGTH", "OI_VIS", "OI_VIS2", "OI_T3")
"""Tables that version 1 had too."""


@dataclass(frozen=True)
class Breach:
    """A rule that a file breaks."""

    grade: str
    table: str
    what: str

    def __str__(self) -> str:
        return f"{self.grade}: {self.table + ': ' if self.table else ''}{self.what}"


class RawTable:
    """A table as it stands in the file."""

    def __init__(self, hdu) -> None:
        self.name, self.header = hdu.name, hdu.header
        self.label = hdu.label
        self.kind: type[Table] = KINDS[hdu.name]
        self.content = BinTable(hdu)
        self.fields: dict[str, Field] = {}
        for field in self.content.fields:
            self.fields.setdefault(field.name.upper(), field)

    def __contains__(self, column: str) -> bool:
        return column in self.fields

    def key(self, keyword: str) -> str:
        """The value of a keyword as text."""
        return self.header.text(keyword)

    def values(self, column: str) -> np.ndarray:
        """(nrow, repeat) values of a column, or (nrow,) text; empty if it is not there."""
        if column not in self.fields:
            return np.empty((0, 0))
        values = self.content.values(self.fields[column])
        if self.fields[column].code == "A":
            return np.array([v.split(b"\0")[0].decode("latin-1").strip() for v in values.tolist()])
        return values

    @property
    def flag(self) -> np.ndarray:
        """(nrow, nwave) bool."""
        return self.values("FLAG") != ord("F")


@dataclass
class Contents:
    """The whole file."""

    primary: object
    tables: list[RawTable]
    faults: list[Breach]

    def named(self, *names: str) -> list[RawTable]:
        """All tables of these names."""
        return [table for table in self.tables if table.name in names]

    @property
    def data(self) -> list[RawTable]:
        """All tables of data."""
        return [table for table in self.tables if issubclass(table.kind, DataTable)]

    def channels(self) -> dict[str, int]:
        """Number of channels of each INSNAME."""
        return {t.key("INSNAME"): t.content.nrow for t in self.named("OI_WAVELENGTH")}


def validate(path: str | Path) -> list[Breach]:
    """The rules of OIFITS 2 that the file at `path` breaks; none if it is valid.

    Raises
    ------
    InputError
        If it is not a FITS file.
    """
    contents = Contents(None, [], [])
    for hdu in read_hdus(Path(path)):
        contradicted = verify(hdu)
        if contradicted:
            what = f"{contradicted} does not verify"
            contents.faults.append(Breach(WARNING, hdu.label, what))
        if hdu.number == 0:
            contents.primary = hdu.header
        elif hdu.name in KINDS:
            try:
                contents.tables.append(RawTable(hdu))
            except Malformed as fault:
                contents.faults.append(Breach(ERROR, hdu.label, str(fault)))
    breaches = list(contents.faults)
    for rule in RULES:
        try:
            breaches += list(rule(contents))
        except Malformed as fault:
            breaches.append(Breach(ERROR, "", str(fault)))
    return breaches


def primary_header(file: Contents) -> Iterator[Breach]:
    """1. The compulsory keywords of the primary header."""
    if file.primary.text("CONTENT") != "OIFITS2":
        yield Breach(ERROR, "", "primary keyword CONTENT is not 'OIFITS2'")
    for name in (
        "ORIGIN", "DATE", "DATE-OBS", "TELESCOP", "INSTRUME", "OBSERVER", "OBJECT", "INSMODE",
    ):  # fmt: skip
        if not file.primary.text(name):
            yield Breach(ERROR, "", f"primary keyword {name} is missing or empty")


def tables_there(file: Contents) -> Iterator[Breach]:
    """2. One OI_TARGET, arrays, wavelengths and data."""
    if len(file.named("OI_TARGET")) != 1:
        yield Breach(ERROR, "", f"{len(file.named('OI_TARGET'))} OI_TARGET tables, not 1")
    for name in ("OI_ARRAY", "OI_WAVELENGTH"):
        if not file.named(name):
            yield Breach(ERROR, "", f"no {name} table")
    if not file.data:
        yield Breach(ERROR, "", "no table of data")


def revisions(file: Contents) -> Iterator[Breach]:
    """3. OI_REVN is 2, or 1 in the tables that version 2 introduced."""
    for table in file.tables:
        found = table.header.get("OI_REVN")
        if found != table.kind.revision:
            yield Breach(ERROR, table.label, f"OI_REVN is {found}, not {table.kind.revision}")


def parts(file: Contents) -> Iterator[Breach]:
    """4. Compulsory keywords and columns, their types and repeat counts."""
    channels = file.channels()
    for table in file.tables:
        for keyword in keywords(table.kind):
            if not keyword.optional and table.header.get(keyword.name) is None:
                yield Breach(ERROR, table.label, f"keyword {keyword.name} is missing")
        for known in columns(table.kind):
            field = table.fields.get(known.name)
            if field is None:
                if not known.optional:
                    yield Breach(ERROR, table.label, f"column {known.name} is missing")
                continue
            yield from _form(table, known, field, channels)


def _form(table: RawTable, known: Column, field: Field, channels) -> Iterator[Breach]:
    if field.code != known.code:
        swapped = {field.code, known.code} in ({"E", "D"}, {"I", "J"})
        grade = WARNING if swapped else ERROR
        yield Breach(grade, table.label, f"column {known.name} is {field.code}, not {known.code}")
    if known.code == "A":
        if field.repeat != known.width and known.name != "INSNAME":
            grade = WARNING if known.name in ("TARGET", "SPECTYP") else ERROR
            what = f"column {known.name} has {field.repeat} letters, not {known.width}"
            yield Breach(grade, table.label, what)
        return
    if NWAVE in known.shape:
        if table.name == "OI_INSPOL":
            wanted = {channels.get(name) for name in table.values("INSNAME").tolist()} - {None}
        else:
            wanted = {channels[n] for n in (table.key("INSNAME"),) if n in channels}
        sizes = {size ** known.shape.count(NWAVE) for size in wanted}
    else:
        sizes = {int(np.prod(known.shape, dtype=int))}
    if sizes and sizes != {field.repeat}:
        what = f"column {known.name} has {field.repeat} values a row, not {min(sizes)}"
        yield Breach(ERROR, table.label, what)


def words(file: Contents) -> Iterator[Breach]:
    """5. Keywords and columns that must be one of a few words."""
    lists = {
        ("OI_ARRAY", "FRAME"): (ERROR, {"GEOCENTRIC", "SKY"}),
        ("OI_VIS", "AMPTYP"): (ERROR, {"absolute", "differential", "correlated flux"}),
        ("OI_VIS", "PHITYP"): (ERROR, {"absolute", "differential"}),
        ("OI_FLUX", "CALSTAT"): (ERROR, {"C", "U"}),
        ("OI_FLUX", "FOVTYPE"): (ERROR, {"FWHM", "RADIUS"}),
        ("OI_ARRAY", "FOVTYPE"): (ADVICE, {"FWHM", "RADIUS"}),
        ("OI_INSPOL", "ORIENT"): (ADVICE, {"NORTH", "LABORATORY"}),
        ("OI_TARGET", "CATEGORY"): (ADVICE, {"CAL", "SCI"}),
        ("OI_TARGET", "VELDEF"): (ADVICE, {"OPTICAL", "RADIO"}),
    }
    for (name, place), (grade, allowed) in lists.items():
        for table in file.named(name):
            found = set(table.values(place).tolist()) if place in table else {table.key(place)}
            for word in sorted(found - allowed - {""}):
                yield Breach(grade, table.label, f"{place} is {word!r}, none of {sorted(allowed)}")


def reference_maps(file: Contents) -> Iterator[Breach]:
    """6. VISREFMAP goes with differential quantities, and only with them."""
    for table in file.named("OI_VIS"):
        differential = "differential" in (table.key("AMPTYP"), table.key("PHITYP"))
        if differential and "VISREFMAP" not in table:
            yield Breach(ERROR, table.label, "differential, but there is no VISREFMAP")
        if not differential and "VISREFMAP" in table:
            yield Breach(WARNING, table.label, "VISREFMAP, but nothing is differential")


def arrays_of_data(file: Contents) -> Iterator[Breach]:
    """7. ARRNAME where stations count; the two kinds of OI_FLUX."""
    for table in file.named("OI_FLUX"):
        raw = table.key("CALSTAT") == "U"
        for what, there in (("ARRNAME", table.key("ARRNAME")), ("STA_INDEX", "STA_INDEX" in table)):
            if raw and not there:
                yield Breach(ERROR, table.label, f"uncalibrated, but without {what}")
            if not raw and there:
                yield Breach(ERROR, table.label, f"calibrated, but with {what}")
        if raw and table.key("FOVTYPE"):
            yield Breach(ERROR, table.label, "uncalibrated, but with FOVTYPE")
    # A missing ARRNAME of the other tables is found with their compulsory keywords.


def references(file: Contents) -> Iterator[Breach]:
    """8. Whatever a table of data refers to is in the file."""
    targets = np.concatenate(
        [t.values("TARGET_ID").ravel() for t in file.named("OI_TARGET")] or [[]]
    )
    stations = {t.key("ARRNAME"): t.values("STA_INDEX") for t in file.named("OI_ARRAY")}
    instruments = file.channels()
    matrices = {t.key("CORRNAME") for t in file.named("OI_CORR")}
    for table in (*file.data, *file.named("OI_INSPOL")):
        if not np.isin(table.values("TARGET_ID"), targets).all():
            yield Breach(ERROR, table.label, "a TARGET_ID is not in OI_TARGET")
        array = table.key("ARRNAME")
        if array and array not in stations:
            yield Breach(ERROR, table.label, f"ARRNAME {array!r} has no OI_ARRAY")
        elif array and not np.isin(table.values("STA_INDEX"), stations[array]).all():
            yield Breach(ERROR, table.label, f"a STA_INDEX is not in the OI_ARRAY {array!r}")
        names = [table.key("INSNAME")] if table.key("INSNAME") else table.values("INSNAME").tolist()
        for name in sorted(set(names) - set(instruments)):
            yield Breach(ADVICE, table.label, f"INSNAME {name!r} has no OI_WAVELENGTH")
        if table.key("CORRNAME") and table.key("CORRNAME") not in matrices:
            yield Breach(ERROR, table.label, f"CORRNAME {table.key('CORRNAME')!r} has no OI_CORR")


def errors(file: Contents) -> Iterator[Breach]:
    """9. No datum that counts has a negative error."""
    for table in file.data:
        for value, error, _ in table.kind.quantities:
            if value not in table or error not in table or "FLAG" not in table:
                continue
            sigma, datum = table.values(error), table.values(value)
            if sigma.shape != table.flag.shape:
                continue  # reported with the repeat counts
            counted = ~table.flag
            if (counted & (sigma < 0)).any():
                yield Breach(ERROR, table.label, f"column {error} is negative in unflagged data")
            if (counted & (sigma == 0)).any():
                yield Breach(ADVICE, table.label, f"column {error} is 0 in unflagged data")
            if (counted & np.isnan(sigma) & np.isfinite(datum)).any():
                yield Breach(WARNING, table.label, f"column {error} is NaN in unflagged data")


def triple_amplitudes(file: Contents) -> Iterator[Breach]:
    """10. No triple amplitude that counts is above 1 by more than its error."""
    for table in file.named(T3.extname):
        value, sigma = table.values("T3AMP"), table.values("T3AMPERR")
        if (
            value.shape == sigma.shape == table.flag.shape
            and (~table.flag & (value > 1 + sigma)).any()
        ):
            yield Breach(ERROR, table.label, "column T3AMP is above 1 + T3AMPERR in unflagged data")


def times(file: Contents) -> Iterator[Breach]:
    """11. TIME is 0, and MJD is positive."""
    for table in file.named(Vis.extname, Vis2.extname, T3.extname):
        if (np.abs(table.values("TIME")) > 1e-10).any():
            yield Breach(WARNING, table.label, "column TIME is not 0")
    for table in file.data:
        if not (table.values("MJD") > 0).all():
            yield Breach(ADVICE, table.label, "column MJD is not positive throughout")


def wavelengths(file: Contents) -> Iterator[Breach]:
    """12. Wavelengths ascend and are such; widths are not negative."""
    for table in file.named("OI_WAVELENGTH"):
        wave, band = table.values("EFF_WAVE").ravel(), table.values("EFF_BAND").ravel()
        if (np.diff(wave) <= 0).any():
            yield Breach(WARNING, table.label, "column EFF_WAVE does not ascend")
        if not ((wave >= SHORTEST_WAVE) & (wave <= LONGEST_WAVE)).all():
            yield Breach(ADVICE, table.label, "column EFF_WAVE is not between 1e-7 and 1e-3 m")
        if not (band >= 0).all():
            yield Breach(ADVICE, table.label, "column EFF_BAND is negative or NaN")


def ids(file: Contents) -> Iterator[Breach]:
    """13. Ids are unique and start at 1; targets have different names."""
    for name, column in (("OI_TARGET", "TARGET_ID"), ("OI_ARRAY", "STA_INDEX")):
        for table in file.named(name):
            numbers = table.values(column).ravel()
            if np.unique(numbers).size < numbers.size:
                yield Breach(ADVICE, table.label, f"column {column} has a number twice")
            if (numbers < 1).any():
                yield Breach(WARNING, table.label, f"column {column} has numbers below 1")
    for table in file.named("OI_TARGET"):
        names = table.values("TARGET").tolist()
        if len(set(names)) < len(names):
            yield Breach(WARNING, table.label, "column TARGET has a name twice")


def names(file: Contents) -> Iterator[Breach]:
    """14. INSNAME, ARRNAME and CORRNAME are unique; the stations of a row differ."""
    for extname, keyword in (
        ("OI_WAVELENGTH", "INSNAME"),
        ("OI_ARRAY", "ARRNAME"),
        ("OI_CORR", "CORRNAME"),
    ):
        for name, count in Counter(t.key(keyword) for t in file.named(extname)).items():
            if count > 1:
                yield Breach(ADVICE, "", f"{count} {extname} tables have the {keyword} {name!r}")
    for table in file.named(Vis.extname, Vis2.extname, T3.extname):
        ordered = np.sort(table.values("STA_INDEX"), axis=1)
        if (ordered[:, 1:] == ordered[:, :-1]).any():
            yield Breach(ADVICE, table.label, "a row has the same station twice")


def correlations(file: Contents) -> Iterator[Breach]:
    """15. Pairs of OI_CORR name existing data, once, with correlations between -1 and 1."""
    for table in file.named("OI_CORR"):
        size = table.header.get("NDATA")
        i, j = table.values("IINDX").ravel(), table.values("JINDX").ravel()
        corr = table.values("CORR").ravel()
        if not (len(i) == len(j) == len(corr)) or not isinstance(size, int):
            continue  # reported with the compulsory parts
        if i.size and (min(i.min(), j.min()) < 1 or max(i.max(), j.max()) > size):
            yield Breach(ADVICE, table.label, f"an index is outside 1 to NDATA = {size}")
        if not (np.abs(corr) <= 1).all() or (corr[i == j] != 1).any():
            yield Breach(ADVICE, table.label, "a CORR is outside -1 to 1, or not 1 on the diagonal")
        if not first_of_pairs(np.minimum(i, j), np.maximum(i, j)).all():
            yield Breach(ADVICE, table.label, "a pair is listed twice")


def units(file: Contents) -> Iterator[Breach]:
    """15. Columns whose unit the standard leaves open state one."""
    for table in file.tables:
        for known in columns(table.kind):
            if known.unit == OPEN and known.name in table and not table.fields[known.name].unit:
                yield Breach(ADVICE, table.label, f"column {known.name} has no unit")


RULES = (
    primary_header,
    tables_there,
    revisions,
    parts,
    words,
    reference_maps,
    arrays_of_data,
    references,
    errors,
    triple_amplitudes,
    times,
    wavelengths,
    ids,
    names,
    correlations,
    units,
)
