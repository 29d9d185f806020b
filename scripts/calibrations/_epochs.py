"""Epochs for calibrations: three kinds of array, with noise drawn from a stated covariance."""

from dataclasses import dataclass, replace

import numpy as np

from orbits.binary import predict
from orbits.companion.covariance import Covariance, ErrorModel
from orbits.constants import MAS
from orbits.observation import Observation
from orbits.sampling import Sampling
from orbits.simulation.array import Array
from orbits.simulation.nights import Spectrum, blank_night

V2_ERROR, T3_ERROR = 0.02, np.radians(0.7)
STATIONS = {
    "4 telescopes": [(0, 0), (48, 22), (-35, 81), (66, 103)],
    "6 telescopes": [(0, 0), (31, 12), (-22, 70), (95, 48), (60, -85), (-88, -31)],
    "mask of 7 holes": [
        (0, 0), (2.3, 0.6), (-1.2, 2.5), (3.1, 2.9), (0.9, -2.8), (-2.9, -1.4), (-3.2, 1.1),
    ],
}  # fmt: skip


@dataclass(frozen=True, eq=False)
class Design:
    """An epoch without values, and how far and how fine it sees."""

    name: str
    blank: Observation
    resolution: float
    """Wavelength over the longest baseline, mas."""

    @classmethod
    def of(cls, name: str, *, exposures: int, channels: int) -> "Design":
        """One of `STATIONS` in the K band."""
        ground = np.array([(*place, 0.0) for place in STATIONS[name]])
        array = Array(
            name=name, latitude=-24.6, longitude=-70.4, diameter=1.0, local=ground,
            stations=tuple("ABCDEFG"[: len(ground)]),
        )  # fmt: skip
        blank = blank_night(
            array, Spectrum.even("K", 2.0e-6, 2.4e-6, channels), target=name, ra=40.0, dec=-30.0,
            mjd=60000.1 + np.arange(exposures) / 24,
        )  # fmt: skip
        errors = ((blank.v2, V2_ERROR), (blank.t3, T3_ERROR))
        v2, t3 = (replace(table, error=np.full(len(table), error)) for table, error in errors)
        finest = (v2.wavelength / v2.baselines).min() / MAS
        return cls(name, replace(blank, v2=v2, t3=t3), finest)

    def observe(
        self, rng: np.random.Generator, errors: ErrorModel | None = None, **values: float
    ) -> tuple[Observation, Covariance]:
        """The epoch with a scene in it and noise of the covariance that is returned too.

        `values` are parameters of `orbits.binary.Scene`.
        """
        v2, t3 = predict(self.blank, **values)
        bright = replace(self.blank, v2=replace(self.blank.v2, value=v2))
        covariance = Covariance.of(bright, Sampling.of(bright, radius=0.0), errors)
        noise = covariance.draw(rng)
        n = len(v2)
        phase = (t3 + noise[n:] + np.pi) % (2 * np.pi) - np.pi
        filled = replace(
            self.blank,
            v2=replace(self.blank.v2, value=v2 + noise[:n]),
            t3=replace(self.blank.t3, value=phase),
        )
        return filled, covariance
