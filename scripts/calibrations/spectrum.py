"""Contrast spectra of companions in simulated epochs, against what was put in.

Of each kind of companion: chi-square of the contrasts about the truth, with their covariance
between channels, whose law is known; and the share of single channels within their error. The
errors are those of the data as stated. What was found on another fringe is told apart.
"""

from collections.abc import Mapping

import astropy.units as u
import numpy as np
from scipy.stats import chi2, kstest

from orbits.binary import Scene
from orbits.companion.covariance import ErrorModel
from orbits.companion.search import search
from orbits.companion.spectrum import spectrum

from ._epochs import Design
from .search import CORRELATED, FIELD, random_place

SCENE = Scene(reference=2.2e-6)
CHANNELS = 6
COMPANIONS = {
    "faint and red": ({"contrast": 0.03, "slope": 3.0}, ErrorModel()),
    "faint, correlated errors": ({"contrast": 0.05, "slope": -3.0}, CORRELATED),
    "bright and resolved": ({"contrast": 0.4, "slope": 1.0, "diameter": 0.4}, ErrorModel()),
    "bright, too small to be resolved": ({"contrast": 0.4, "diameter": 0.15}, ErrorModel()),
}
"""Name: (the companion, its diameter in units of the resolution; how errors hang together)."""


def run(fraction: float) -> None:
    """Print claims and findings for `fraction` of the full number of epochs."""
    rng = np.random.default_rng(2028)
    for name, (companion, errors) in COMPANIONS.items():
        trial(name, companion, errors, max(int(200 * fraction), 10), rng)


def trial(
    name: str, companion: Mapping[str, float], errors: ErrorModel, epochs: int,
    rng: np.random.Generator,
) -> np.ndarray:  # fmt: skip
    """Chi-squares of the spectra of `epochs` epochs about the truth, (n,)."""
    design = Design.of("4 telescopes", exposures=3, channels=CHANNELS)
    total, pulls, elsewhere = [], [], 0
    for _ in range(epochs):
        truth = {**companion, **random_place(design, rng)}
        truth["primary_diameter"] = 0.5 * design.resolution
        truth["diameter"] = design.resolution * companion.get("diameter", 0.0)
        observation, _ = design.observe(rng, errors, scene=SCENE, **truth)
        best = search(
            observation, field=FIELD * design.resolution * u.mas, errors=errors, noise_searches=0
        ).best
        if np.hypot(best.x_mas - truth["x"], best.y_mas - truth["y"]) > design.resolution / 2:
            elsewhere += 1
            continue
        got = spectrum(observation, best, errors=errors)
        slope = companion.get("slope", 0.0)
        miss = got.contrast - companion["contrast"] * (got.wavelength / SCENE.reference) ** slope
        total.append(got.error_scale**2 * miss @ np.linalg.solve(got.covariance, miss))
        pulls.append(got.error_scale * miss / got.error)
    total, pulls = np.array(total), np.array(pulls)
    n = len(total)
    print(f"  {name}: chi-square of {n} spectra of {CHANNELS} channels {total.mean():.2f} "
          f"(+-{np.sqrt(2 * CHANNELS / n):.2f}), Kolmogorov-Smirnov p "
          f"{kstest(total, chi2(CHANNELS).cdf).pvalue:.3f};", flush=True)  # fmt: skip
    print(f"    68.3% intervals of single channels hold {100 * np.mean(np.abs(pulls) < 1):.1f}% "
          f"(+-{46.5 / np.sqrt(n):.1f} or less), largest deviation {np.abs(pulls).max():.1f}; "
          f"on another fringe {elsewhere}", flush=True)  # fmt: skip
    return total
