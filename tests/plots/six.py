"""Six very different orbits, each with positions: what every drawing of an orbit must cope with."""

import numpy as np

from orbits.bundle import Bundle, Orbits, draw_orbits
from orbits.positions import Positions, ellipse_covariance

_PLACE = {"periastron": 60000.0, "node": 63.0, "argument": 212.0}
_ORBITS = {
    "face-on": {"period": 100.0, "semimajor_axis": 20.0, "eccentricity": 0.3, "inclination": 2.0},
    "edge-on": {"period": 100.0, "semimajor_axis": 20.0, "eccentricity": 0.3, "inclination": 90.0},
    "eccentric": {
        "period": 9000.0,
        "semimajor_axis": 5200.0,
        "eccentricity": 0.95,
        "inclination": 130.0,
    },
    "circular": {"period": 1.14, "semimajor_axis": 1.225, "eccentricity": 0.0, "inclination": 50.0},
    "period to 20%": {
        "period": 100.0,
        "semimajor_axis": 20.0,
        "eccentricity": 0.4,
        "inclination": 50.0,
    },
    "arc only": {
        "period": 30000.0,
        "semimajor_axis": 500.0,
        "eccentricity": 0.4,
        "inclination": 50.0,
    },
}
_ERRORS = {
    "period to 20%": {"period": 20.0, "semimajor_axis": 3.0, "eccentricity": 0.05},
    "arc only": {"period": 6000.0, "semimajor_axis": 100.0, "eccentricity": 0.1, "argument": 20.0},
}
_SEEN = {"period to 20%": (0.1, 0.6), "arc only": (0.30, 0.36)}
NAMES = tuple(_ORBITS)


def orbit(name: str) -> Bundle:
    """The bundle of that name, with twelve positions and their errors."""
    rng = np.random.default_rng(11)
    values = _PLACE | _ORBITS[name]
    best = Orbits.of({key: [value] for key, value in values.items()})
    small = {"semimajor_axis": 0.015 * values["semimajor_axis"], "inclination": 1.0}
    first, last = _SEEN.get(name, (0.0, 1.0))
    mjd = values["periastron"] + values["period"] * np.linspace(first, last, 12, endpoint=False)
    size = 0.01 * values["semimajor_axis"] * np.ones(12)
    covariance = ellipse_covariance(size, size / 2, rng.uniform(0, 180, 12))
    exact = np.stack(best.offsets(mjd), axis=-1)[0]
    noise = np.array([rng.multivariate_normal([0, 0], matrix) for matrix in covariance])
    texts = np.full(12, "", dtype=object)
    return Bundle(
        name=name,
        best=best,
        draws=draw_orbits(values, _ERRORS.get(name, small), 100, rng),
        spread="errors, as if independent",
        ascending=name in ("edge-on", "circular"),
        positions=Positions(
            mjd=mjd,
            xy=exact + noise,
            covariance=covariance,
            weight=np.ones(12),
            night=np.array([f"night {n}" for n in range(12)], dtype=object),
            instrument=texts,
            source=texts,
            contrast=np.full(12, np.nan),
            contrast_error=np.full(12, np.nan),
        ),
    )
