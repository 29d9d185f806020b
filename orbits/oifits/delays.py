"""Group delays: the turns over the band that the atmosphere gives the phases of a baseline.

A path difference turns the phase in proportion to the wavenumber, by many turns over a wide band.
Wrapped into one turn that is no straight line any more; taken out as far as it shows, a slope of a
fraction of a turn is left, and means nothing.
"""

import numpy as np

STEPS = 4
"""Delays tried within the one that turns the phase once over the band."""
TOGETHER = 512
"""Delays tried at a time."""


def without_delay(phase: np.ndarray, keep: np.ndarray, wavelength: np.ndarray) -> np.ndarray:
    """Phases (nrow, nwave), rad, less the group delay and the mean phase of each row.

    The delay is that at which the phasors of the row add up best. Only data in `keep` count;
    `wavelength` (nwave,) is in m.
    """
    wavenumber = 1 / wavelength
    wavenumber = wavenumber - wavenumber.mean()
    width = np.ptp(wavenumber)
    if width == 0:
        return phase
    # Delays beyond this turn the phase by more than half a turn from channel to channel.
    count = STEPS * len(wavelength) // 2
    delays = np.arange(-count, count + 1) / (STEPS * width)
    phasor = np.where(keep, np.exp(1j * np.where(keep, phase, 0.0)), 0.0)
    best, top = np.zeros(len(phase)), np.zeros(len(phase), dtype=complex)
    for start in range(0, len(delays), TOGETHER):
        some = delays[start : start + TOGETHER]
        sums = phasor @ np.exp(-2j * np.pi * np.outer(wavenumber, some))
        at = np.abs(sums).argmax(axis=1)
        peak = sums[np.arange(len(sums)), at]
        higher = np.abs(peak) > np.abs(top)
        best, top = np.where(higher, some[at], best), np.where(higher, peak, top)
    turned = phase - 2 * np.pi * best[:, None] * wavenumber - np.angle(top)[:, None]
    return (turned + np.pi) % (2 * np.pi) - np.pi
