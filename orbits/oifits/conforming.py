"""Making a file fit to be written: whatever version 2 forbids is put right, and said.

What the standard does not let count is flagged, or NaN where only one of the two quantities that
share a flag is concerned. No datum that the reader uses is changed, but for triple amplitudes above
1 by more than their error: the standard forbids them, as noise does not, so that the mean of those
of an unresolved star comes out too low. The history says by how much.
"""

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from .correlation import Cut, first_of_pairs, renumbered
from .links import mapped
from .model import T3, Array, DataTable, Flux, OIFile, Vis
from .observables import timed
from .stars import plain
from .utc import iso

UNKNOWN_ARRAY = "UNKNOWN"


def conform(file: OIFile) -> OIFile:
    """A copy of `file` of which `write` makes a valid file; its history tells the changes.

    What only the author of the file can know, such as the reference channels of differential
    phases, stays as it is.
    """
    for step in STEPS:
        said: list[str] = []
        file = step(file, said.append)
        file = replace(file, history=[*file.history, *said])
    return file


Say = Callable[[str], None]


def dates(file: OIFile, say: Say) -> OIFile:
    """Every table of data has its DATE-OBS."""
    data = []
    for table in file.data:
        times = table.mjd[timed(table)]
        if not table.date_obs and times.size:
            table = replace(table, date_obs=iso(times.min())[:10])
            say(f"{table.extname}: DATE-OBS taken from MJD")
        data.append(table)
    return replace(file, data=data)


def names(file: OIFile, say: Say) -> OIFile:
    """Words are written as the standard has them; calibrated spectra belong to no station."""
    data = []
    for table in file.data:
        if isinstance(table, Vis):
            lower = {k: getattr(table, k) for k in ("amptyp", "phityp") if getattr(table, k)}
            table = replace(table, **{k: v.lower() for k, v in lower.items()})
        if (
            isinstance(table, Flux)
            and table.calstat == "C"
            and (table.arrname is not None or table.sta_index is not None)
        ):
            table = replace(table, arrname=None, sta_index=None)
            say("OI_FLUX: stations removed from a calibrated spectrum")
        data.append(table)
    return replace(file, data=data)


def targets(file: OIFile, say: Say) -> OIFile:
    """Targets are numbered from 1, each once."""
    names = [plain(name) for name in file.target.target.tolist()]
    order = list(dict.fromkeys(names))
    first = [i for i, name in enumerate(names) if name not in names[:i]]
    pairs = zip(file.target.target_id.tolist(), names, strict=True)
    new = {old: order.index(name) + 1 for old, name in pairs}
    if len(first) == len(new) and min(new) >= 1:
        return file
    say("targets numbered anew from 1")
    rows = np.isin(np.arange(len(file.target)), first)
    target = replace(file.target.select(rows), target_id=np.arange(1, len(order) + 1))
    return replace(
        file,
        target=target,
        data=[replace(t, target_id=mapped(t.target_id, new)) for t in file.data],
        polarisations=[replace(t, target_id=mapped(t.target_id, new)) for t in file.polarisations],
    )


def stations(file: OIFile, say: Say) -> OIFile:
    """Every table of data has an array, which knows its stations, numbered from 1."""
    arrays = list(file.arrays)
    data = []
    for table in file.data:
        if table.sta_index is not None and table.arrname is None:
            table = replace(table, arrname=arrays[0].arrname if len(arrays) == 1 else UNKNOWN_ARRAY)
        data.append(table)
    wanted = {table.arrname for table in (*data, *file.polarisations)} - {None}
    unknown = sorted(wanted - {array.arrname for array in arrays})
    if not arrays and not unknown:
        unknown = [UNKNOWN_ARRAY]  # there must be one, even if all that is left are spectra
    for name in unknown:
        arrays.append(_placeholder(name))
        say(f"OI_ARRAY {name} made up of station numbers; positions are unknown")
    file = replace(file, arrays=arrays, data=data)
    for number, array in enumerate(arrays):
        file = _with_all_stations(file, number, array, say)
    return file


def _placeholder(name: str) -> Array:
    empty = np.empty(0)
    return Array(arrname=name, tel_name=empty, sta_name=empty, sta_index=empty)


def _with_all_stations(file: OIFile, number: int, array: Array, say: Say) -> OIFile:
    """`array`, the `number`-th of `file`, with all stations that data refer to."""
    tables = (*file.data, *file.polarisations)
    mine = [t for t in tables if t.arrname == array.arrname and t.sta_index is not None]
    used = np.unique(np.concatenate([t.sta_index.ravel() for t in mine] or [np.empty(0, int)]))
    missing = used[~np.isin(used, array.sta_index)]
    if missing.size:
        if len(array):
            say(f"OI_ARRAY {array.arrname}: {missing.size} stations added; positions are unknown")
        array = _extended(array, missing)
    if array.sta_index.min(initial=1) < 1:
        say(f"OI_ARRAY {array.arrname}: stations numbered anew from 1")
        new = {int(old): i + 1 for i, old in enumerate(dict.fromkeys(array.sta_index.tolist()))}
        array = replace(array, sta_index=mapped(array.sta_index, new))
        changed = {id(t): replace(t, sta_index=mapped(t.sta_index, new)) for t in mine}
        file = replace(
            file,
            data=[changed.get(id(t), t) for t in file.data],
            polarisations=[changed.get(id(t), t) for t in file.polarisations],
        )
    return replace(file, arrays=[*file.arrays[:number], array, *file.arrays[number + 1 :]])


def _extended(array: Array, indices: np.ndarray) -> Array:
    count = len(indices)
    labels = np.array([f"STATION {i}" for i in indices.tolist()])
    added = Array(arrname=array.arrname, tel_name=labels, sta_name=labels, sta_index=indices)
    joined = {c.name.lower(): np.concatenate([array[c.name], added[c.name]]) for c in array.present}
    padded = {
        name: replace(extra, raw=np.pad(extra.raw, ((0, count), (0, 0))))
        for name, extra in array.extra.items()
    }
    return replace(array, **joined, extra=padded)


def channels(file: OIFile, say: Say) -> OIFile:
    """Wavelengths ascend; widths are not negative."""
    orders = {w.insname: np.argsort(w.eff_wave, kind="stable") for w in file.wavelengths}
    turned = {name for name, order in orders.items() if (np.diff(order) < 0).any()}
    wavelengths = []
    for table in file.wavelengths:
        if table.insname in turned:
            say(f"OI_WAVELENGTH {table.insname}: channels put in ascending order")
            table = table.select(orders[table.insname])
        if not (table.eff_band >= 0).all():
            say(f"OI_WAVELENGTH {table.insname}: EFF_BAND that is not positive set to 0")
            table = replace(table, eff_band=np.where(table.eff_band > 0, table.eff_band, 0))
        wavelengths.append(table)
    if not turned:
        return replace(file, wavelengths=wavelengths)
    cuts = []
    for table in file.data:
        rows, order = np.arange(len(table)), orders[table.insname]
        after = table.select(rows, order) if table.insname in turned else table
        cuts.append(Cut(after, order))
    correlations, data = renumbered(file.correlations, cuts)
    return replace(file, wavelengths=wavelengths, data=data, correlations=correlations)


def data(file: OIFile, say: Say) -> OIFile:
    """Nothing counts that has no usable error, nor an amplitude above 1."""
    return replace(file, data=[_fit(table, say) for table in file.data])


def _fit(table: DataTable, say: Say) -> DataTable:
    changes: dict[str, np.ndarray] = {}
    flag = table.flag
    for value, error, _ in table.measured:
        datum, sigma = table[value], table[error]
        sound = (sigma > 0) & (sigma < np.inf)
        missing = np.isnan(datum) & (sound | np.isnan(sigma))  # which the standard allows
        bad = ~table.flag & ~missing & ~(sound & np.isfinite(datum))
        if bad.any():
            done = "flagged" if value in DECISIVE else "set to NaN"
            say(
                f"{table.extname}: {np.count_nonzero(bad)} {value} without a number and a "
                f"positive error {done}"
            )
        if isinstance(table, T3) and value == "T3AMP":
            bad |= _too_bright(table, ~table.flag & ~bad & ~missing, say)
        if not bad.any():
            continue
        if value in DECISIVE:
            flag = flag | bad
        else:
            changes[value.lower()] = np.where(bad, np.nan, datum)
            changes[error.lower()] = np.where(bad, np.nan, sigma)
    if flag is not table.flag:
        changes["flag"] = flag
    return replace(table, **changes) if changes else table


def _too_bright(table: T3, used: np.ndarray, say: Say) -> np.ndarray:
    """(nrow, nwave) bool: triple amplitudes among those `used` that the standard forbids."""
    above = used & (table.t3amp > 1 + table.t3amperr)
    if above.any():
        rest, biased = table.t3amp[used & ~above], "nothing, for none is left"
        with np.errstate(over="ignore", invalid="ignore"):  # amplitudes can be any numbers
            if rest.size:
                before, after = table.t3amp[used].mean(), rest.mean()
                biased = f"their mean, from {before:.4g} to {after:.4g}"
        say(
            f"{table.extname}: {np.count_nonzero(above)} of {np.count_nonzero(used)} T3AMP above "
            f"1 + T3AMPERR, which the standard forbids, set to NaN; this biases {biased}"
        )
    return above


def correlations(file: OIFile, say: Say) -> OIFile:
    """OI_CORR lists each pair once, above the diagonal, with a correlation that can be one."""
    kept = []
    for table in file.correlations:
        i, j = np.minimum(table.iindx, table.jindx), np.maximum(table.iindx, table.jindx)
        rows = (i >= 1) & (j <= table.ndata) & (i < j) & (np.abs(table.corr) <= 1)
        rows &= first_of_pairs(i, j)
        if not rows.all():
            count = np.count_nonzero(~rows)
            say(f"OI_CORR {table.corrname}: {count} rows that mean nothing removed")
            table = replace(table, iindx=i, jindx=j).select(rows)
        elif (table.iindx > table.jindx).any():
            table = replace(table, iindx=i, jindx=j)
        kept.append(table)
    return replace(file, correlations=kept)


DECISIVE = {"VIS2DATA", "T3PHI", "VISPHI", "FLUXDATA"}
"""Where this cannot count, the datum is flagged; others share its flag and become NaN."""

STEPS = (dates, names, targets, stations, channels, data, correlations)
