"""Amendments: faults of a file that are mended when it is read, or that make a table useless."""

import numpy as np

from ..errors import InputError
from ..problems import Log
from .model import BaselineTable, OIFile
from .observables import LONGEST, OLDEST_MJD, YOUNGEST_MJD, sound, timed
from .utc import day_of

JULIAN_DATE_OF_MJD_0 = 2_400_000.5


def amend(file: OIFile, log: Log) -> None:
    """Mend the times of `file`, and leave out tables whose lengths are in unknown units.

    Raises
    ------
    InputError
        If no table of data is left.
    """
    for table in file.data:
        _julian_dates(table, log)
        _missing_dates(table, file.version, log)
    _wavelengths_in_other_units(file, log)
    _baselines_in_other_units(file, log)
    if not file.data:
        last = log.problems[-1]
        raise InputError(
            f"{file.source}: no usable table of data is left: {last.table}: {last.what}"
        )


def _julian_dates(table, log: Log) -> None:
    day = table.mjd - JULIAN_DATE_OF_MJD_0
    late = (day > OLDEST_MJD) & (day < YOUNGEST_MJD)
    if late.any():
        log.suspicious(
            table.label,
            f"column MJD: {np.count_nonzero(late)} rows hold a Julian date "
            f"({table.mjd[late][0]:.3f})",
            "2400000.5 is subtracted",
        )
        table.mjd = np.where(late, day, table.mjd)


def _missing_dates(table, version: int, log: Log) -> None:
    bad = ~((table.mjd >= OLDEST_MJD) & (table.mjd < YOUNGEST_MJD))
    if not bad.any():
        return
    what = f"column MJD: {np.count_nonzero(bad)} rows have no time ({table.mjd[bad][0]:g})"
    start = day_of(table.date_obs)
    first_version = (table.revn or version) == 1 and isinstance(table, BaselineTable)
    if first_version and start is not None and np.isfinite(table.time[bad]).all():
        log.suspicious(table.label, what, "DATE-OBS + TIME is used")
        table.mjd = np.where(bad, start + table.time / 86400, table.mjd)
    elif not timed(table).all():
        log.unusable(table.label, what, "these rows are left out")
    else:
        log.suspicious(table.label, what, "used as it is; its time means nothing")


def _wavelengths_in_other_units(file: OIFile, log: Log) -> None:
    for spectrum in list(file.wavelengths):
        good = sound(spectrum)
        if good.all():
            continue
        example = f"EFF_WAVE of {spectrum.insname!r} is {spectrum.eff_wave[~good][0]:g}"
        if good.any():
            log.unusable(
                spectrum.label,
                f"{example} m in {np.count_nonzero(~good)} channels: no optical wavelength",
                "the data of these channels are left out",
            )
            continue
        file.data[:] = [t for t in file.data if t.insname != spectrum.insname]
        log.unusable(
            spectrum.label,
            f"{example}, which is no optical wavelength in m: state its unit in TUNIT",
            "all its data are left out",
        )


def _baselines_in_other_units(file: OIFile, log: Log) -> None:
    for table in [t for t in file.data if isinstance(t, BaselineTable) and len(t)]:
        longest = table.sides.max(axis=1)
        far = ~(longest < LONGEST)
        if not far.any():
            continue
        value = longest[far][0]
        if far.mean() > 0.5 and np.isfinite(longest[far]).any():
            file.data[:] = [t for t in file.data if t is not table]
            what = f"(u, v) reach {value:.3g}, which is no baseline in m but perhaps in wavelengths"
            log.unusable(table.label, f"{what}: convert them to m", "the table is left out")
        else:
            what = f"{np.count_nonzero(far)} rows have a baseline of {value:.3g} m"
            log.unusable(table.label, what, "these rows are left out")
