"""Checks of the numbers measured, and of their errors."""

import numpy as np

from ...problems import Log
from .. import references
from ..model import T3, BaselineTable, OIFile, Vis
from ..observables import (
    ENOUGH,
    KINDS,
    LARGEST_VALUE,
    LEAST_ERROR,
    Kind,
    fringes,
    is_visibility,
    least_error,
    sampled,
    sound,
    unnormalised,
    usable,
)

TOO_SMALL = 30.0
"""Scatter over error beyond which errors are called far too small: one and a half decades."""
ROUGH = 300.0
"""The same for the scatter between channels, to which a companion far out contributes: bright ones
make neighbouring closure phases differ by tens of degrees, hundreds of times the best errors."""
MAY_BE_MISSING = {"T3AMP", "VISAMP", "VISPHI", "RVIS", "IVIS", "FLUXDATA"}
"""What instruments leave out while they measure the rest of a table."""
BEST = {"v2": 1e-6, "t3": 1e-4}
"""Errors (of V2; of closure phase, deg) that no interferometer has come near."""
SHORT_TIME = 15 / 1440
"""Two measurements of a baseline within this time, d, are repetitions of each other."""


def errors(file: OIFile, log: Log) -> None:
    """Errors are positive and finite."""
    for table in file.data:
        for value, error, _ in table.measured if len(table) else ():
            least = least_error(table[error], table.flag)
            if table[error].min() > least and table[error].max() < np.inf:
                continue
            counted = ~table.flag & ~np.isnan(table[value])
            for what, bad in (
                ("negative", table[error] < 0),
                ("0", table[error] == 0),
                ("infinite", np.isinf(table[error])),
                (
                    f"over {1 / LEAST_ERROR:.0f} times smaller than is typical",
                    (table[error] > 0) & (table[error] <= least),
                ),
            ):
                bad &= counted
                if bad.any():
                    log.unusable(
                        table.label, f"column {error} is {what} in {_where(bad)}", "left out"
                    )


def nothing_left(file: OIFile, log: Log) -> None:
    """Not every datum is flagged."""
    for table in file.data:
        if len(table) and table.flag.all():
            log.suspicious(table.label, "every datum is flagged", "nothing of it is used")


def missing_values(file: OIFile, log: Log) -> None:
    """Data and errors that are not flagged are numbers."""
    for table in file.data:
        for value, error, _ in table.measured if len(table) else ():
            if np.isfinite(table[value]).all() and not np.isnan(table[error]).any():
                continue
            nan = np.isnan(table[value]) | np.isnan(table[error])
            nan &= ~table.flag
            if not nan.any():
                pass
            elif nan.sum() == np.count_nonzero(~table.flag):
                empty = value if np.isnan(table[value][nan]).all() else error
                say = log.note if value in MAY_BE_MISSING else log.suspicious
                say(table.label, f"column {empty} holds no number", "taken as not measured")
            else:
                log.note(
                    table.label, f"column {value} or {error} is NaN in {_where(nan)}", "left out"
                )
            infinite = np.isinf(table[value]) & ~table.flag
            if infinite.any():
                log.unusable(
                    table.label, f"column {value} is infinite in {_where(infinite)}", "left out"
                )


def absurd_values(file: OIFile, log: Log) -> None:
    """Visibilities and phases are numbers that such a thing can have."""
    for kind in KINDS.values():
        for table in file.of(kind.table):
            value = table[kind.value]
            if not value.size or -LARGEST_VALUE < value.min() <= value.max() < LARGEST_VALUE:
                continue
            absurd = (np.abs(value) >= LARGEST_VALUE) & np.isfinite(value) & ~table.flag
            if absurd.any():
                log.unusable(
                    table.label,
                    f"column {kind.value} is {value[absurd][0]:.2g} in {_where(absurd)}",
                    "left out",
                )


def triple_amplitudes(file: OIFile, log: Log) -> None:
    """Triple amplitudes are normalised."""
    for table in file.of(T3):
        some = sampled(table.flag)
        keep = ~table.flag[some] & (table.t3amperr[some] > 0) & np.isfinite(table.t3amp[some])
        amplitude = table.t3amp[some][keep]
        if unnormalised(amplitude, table.t3amperr[some][keep]):
            log.suspicious(
                table.label,
                f"column T3AMP is not normalised (median {np.median(amplitude):.3g})",
                "amplitudes left out, closure phases used",
            )
        elif amplitude.size and not amplitude.any() and not np.nan_to_num(table.t3amp).any():
            log.note(table.label, "column T3AMP is 0 throughout", "do not ask for it")


def amplitudes(file: OIFile, log: Log) -> None:
    """Amplitudes are those of a visibility, and about as large."""
    for table in file.of(Vis):
        some = sampled(table.flag)
        keep = ~table.flag[some] & (table.visamperr[some] > 0) & np.isfinite(table.visamp[some])
        amplitude = table.visamp[some][keep]
        if not amplitude.size:
            continue
        if not is_visibility(table):
            what = f"AMPTYP {table.amptyp!r}"
            log.note(table.label, f"column VISAMP is no visibility: {what}", "not used as one")
        elif not fringes(amplitude):
            log.suspicious(
                table.label,
                f"column VISAMP is no normalised visibility (median {np.median(amplitude):.3g})",
                "not used as one",
            )


def data_in_use(file: OIFile, log: Log) -> None:
    """What each observable should look like, of the data that are used."""
    for name, judges in JUDGES.items():
        kind = KINDS[name]
        for table in file.of(kind.table):
            keep = usable(table, kind) & sound(file.wavelength(table.insname))
            for judge in judges if keep.any() else ():
                judge(table, kind, keep, log)


def range_of_v2(table: BaselineTable, kind: Kind, keep: np.ndarray, log: Log) -> None:
    """Squared visibilities lie between -0.1 and 1.1, but for three times their error."""
    value = table[kind.value]
    if value.min() >= -0.1 and value.max() <= 1.1:
        return
    margin = 3 * table[kind.error]
    far = keep & ((value - margin > 1.1) | (value + margin < -0.1))
    if far.any():
        log.suspicious(
            table.label,
            f"column {kind.value} is far outside 0 to 1 in {_where(far)}, "
            f"such as {value[far][0]:.3g} +- {table[kind.error][far][0]:.2g}",
            "used; is it calibrated?",
        )


def references_of_phases(table: Vis, kind: Kind, keep: np.ndarray, log: Log) -> None:
    """Differential phases refer to the same channels, or to all others."""
    other = ~references.understood(table)
    if other.any():
        log.note(
            table.label,
            f"column VISREFMAP gives each channel another reference in {np.count_nonzero(other)} "
            f"rows (first: row {int(np.argmax(other)) + 1})",
            "VISPHI, if asked for, is used as if the reference were common to all channels",
        )


def phases_in_radians(table: BaselineTable, kind: Kind, keep: np.ndarray, log: Log) -> None:
    """Closure phases that fill the circle fill it to 180, not to pi.

    A hundred phases with a spread of 1.3 or more that all stay below pi are drawn from the
    circle in radians: of as many normal deviates of that spread one or two would lie beyond.
    """
    phase = table[kind.value]
    some = sampled(keep)
    if (np.abs(phase[some][keep[some]]) > np.pi * (1 + 1e-6)).any():
        return
    phase = phase[keep]
    if phase.size < 100:
        return
    if np.abs(phase).max() <= np.pi * (1 + 1e-6) and np.sqrt(np.mean(phase**2)) > 1.3:
        log.suspicious(
            table.label,
            "column T3PHI fills -3.14 to 3.14: it looks like radians",
            "used as degrees; if it is in radians, state that in TUNIT",
        )


def useless_phases(table: BaselineTable, kind: Kind, keep: np.ndarray, log: Log) -> None:
    """Closure phases are known to better than a radian or so."""
    vague = keep & (table[kind.error] > 60)
    if vague.any():
        log.note(
            table.label,
            f"column {kind.error} exceeds 60 deg in {_where(vague)}",
            "used; such phases tell next to nothing",
        )


def tiny_errors(table: BaselineTable, kind: Kind, keep: np.ndarray, log: Log) -> None:
    """Errors are not better than any instrument's, nor than the scatter of the data."""
    some = sampled(keep)
    typical = float(np.median(table[kind.error][some][keep[some]])) if keep[some].any() else np.inf
    if typical < BEST[kind.name]:
        log.suspicious(
            table.label,
            f"column {kind.error} is typically {typical:.1g}: no instrument is so precise",
            "used as it is; scale it, or set a floor",
        )
        return
    for ratio, limit, between in (
        (_scatter(table, kind, keep), TOO_SMALL, "repeated measurements"),
        (_roughness(table, kind, keep), ROUGH, "neighbouring channels"),
    ):
        if ratio > limit:
            log.suspicious(
                table.label,
                f"column {kind.error} is {ratio:.0f} times smaller than the scatter "
                f"between {between}",
                "used as it is; scale it, or set a floor",
            )
            break


def _scatter(table: BaselineTable, kind: Kind, keep: np.ndarray) -> float:
    """Median ratio of difference and its error, for pairs of rows that repeat each other."""
    key = np.column_stack([table.target_id, table.sta_index])
    order = np.lexsort((table.mjd, *key.T))
    now, then = order[1:], order[:-1]
    repeats = (key[now] == key[then]).all(axis=1) & (table.mjd[now] - table.mjd[then] < SHORT_TIME)
    chosen = np.flatnonzero(repeats)
    chosen = chosen[:: 1 + chosen.size * keep.shape[1] // ENOUGH]
    now, then = now[chosen], then[chosen]
    both = keep[now] & keep[then]
    if np.count_nonzero(both) < 20:
        return 0.0
    difference = table[kind.value][now][both] - table[kind.value][then][both]
    sigma = np.hypot(table[kind.error][now][both], table[kind.error][then][both])
    return _typical(difference, sigma, kind)


def _roughness(table: BaselineTable, kind: Kind, keep: np.ndarray) -> float:
    """Median ratio of second difference and its error, for channels and both their neighbours."""
    if keep.shape[1] < 3:
        return 0.0
    rows = sampled(keep)
    value, error, keep = table[kind.value][rows], table[kind.error][rows], keep[rows]
    three = keep[:, :-2] & keep[:, 1:-1] & keep[:, 2:]
    if np.count_nonzero(three) < 4:  # of which one wild datum cannot be the median
        return 0.0
    low, middle, high = (
        (value[:, k : k + three.shape[1]][three], error[:, k : k + three.shape[1]][three])
        for k in range(3)
    )
    with np.errstate(over="ignore", invalid="ignore"):  # the numbers can be any
        sigma = np.sqrt(low[1] ** 2 + 4 * middle[1] ** 2 + high[1] ** 2)
        return _typical(low[0] - 2 * middle[0] + high[0], sigma, kind)


def _typical(difference: np.ndarray, sigma: np.ndarray, kind: Kind) -> float:
    """Median ratio of differences and their errors: 1 if they are normal deviates of those."""
    if kind.phase:
        difference = np.remainder(difference + 180, 360) - 180
    return float(np.median(np.abs(difference) / sigma)) / 0.6745  # median of |normal deviate|


def _where(bad: np.ndarray) -> str:
    """How many data, and which is the first."""
    row, channel = np.unravel_index(int(np.argmax(bad)), bad.shape)
    first = f"row {row + 1}, channel {channel + 1}"
    count = np.count_nonzero(bad)
    return first if count == 1 else f"{count} data (first: {first})"


JUDGES = {
    "v2": (range_of_v2, tiny_errors),
    "t3": (phases_in_radians, useless_phases, tiny_errors),
    "visphi": (references_of_phases,),
}
CHECKS = (
    errors,
    nothing_left,
    missing_values,
    absurd_values,
    triple_amplitudes,
    amplitudes,
    data_in_use,
)
