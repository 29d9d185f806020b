"""Checks of the spectral channels."""

import numpy as np

from ...problems import Log
from ..model import OIFile


def order(file: OIFile, log: Log) -> None:
    """Wavelengths ascend, and no two channels are the same."""
    for table in file.wavelengths:
        steps = np.diff(table.eff_wave)
        if not steps.size:
            continue
        if (steps < 0).all():
            log.note(table.label, "column EFF_WAVE descends", "the order is kept")
        elif (steps < 0).any():
            log.suspicious(table.label, "column EFF_WAVE is not in order", "the order is kept")
        if np.unique(table.eff_wave).size < len(table):
            log.suspicious(table.label, "two channels have the same EFF_WAVE", "both are used")


def widths(file: OIFile, log: Log) -> None:
    """Channels have a width, and it is less than the wavelength."""
    for table in file.wavelengths:
        wide = table.eff_band >= table.eff_wave
        if wide.any():
            channel = int(np.argmax(wide))
            log.suspicious(
                table.label,
                f"EFF_BAND of channel {channel + 1} ({table.eff_band[channel]:g} m) is not less "
                f"than its wavelength ({table.eff_wave[channel]:g} m)",
                "taken as unknown: no smearing over the band",
            )
        unknown = ~(table.eff_band > 0)
        if unknown.any():
            negative = (table.eff_band < 0).any()
            say = log.suspicious if negative else log.note
            say(
                table.label,
                f"EFF_BAND of {np.count_nonzero(unknown)} channels is not positive",
                "taken as unknown: no smearing over the band",
            )


CHECKS = (order, widths)
