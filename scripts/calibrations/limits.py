"""Detection limits against companions put into simulated epochs.

Recovery: a companion of the contrast stated for 90 per cent completeness is put into epochs without
companion, at random position angles, and searched for; with white noise, with correlated noise that
is known, and with correlated noise taken for white. Threshold: the contrast found half the time
over the one whose expected chi-square gain is the threshold. Exclusion: how often the profile limit
excludes a companion that is there.
"""

import astropy.units as u
import numpy as np

from orbits.companion.covariance import ErrorModel
from orbits.companion.exclusion import profile_limit
from orbits.companion.injection import Companion, inject
from orbits.companion.limits import Limits, limits
from orbits.companion.search import search
from orbits.companion.stack import Stack
from orbits.companion.trials import same_lobe

from ._epochs import Design
from .search import FIELD, NOISE, STARS, prepared

STATED = 0.9
SEPARATIONS = (1.2, 2.5, 3.8, 5.1, 6.4, 7.7)
"""In units of the resolution, wavelength over the longest baseline."""


def run(fraction: float) -> None:
    """Print claims and findings for `fraction` of the full numbers of epochs."""
    rng = np.random.default_rng(2027)
    for name in NOISE:
        recovery(name, max(int(200 * fraction), 10), rng)


def recovery(name: str, epochs: int, rng: np.random.Generator) -> np.ndarray:
    """Share of companions of the stated contrast that the search finds, by separation."""
    actual, assumed = NOISE[name]
    design = Design.of("4 telescopes", exposures=3, channels=6)
    star = {"primary_diameter": 0.5 * design.resolution}
    found = np.zeros((epochs, len(SEPARATIONS)), dtype=bool)
    halves, stated, excluded = [], [], []
    for number in range(epochs):
        observation, _ = design.observe(rng, actual, **star)
        result = epoch_limits(observation, assumed, design, rng)
        curve = result.curve()
        stated.append([np.median(curve[f"{route}_median"]) for route in result.maps])
        for k, separation in enumerate(SEPARATIONS):
            distance = separation * design.resolution
            ring = result.ring(distance)
            halves.append(result.reaching(distance, 0.5) / np.median(result.expected[ring]))
            angle = rng.uniform(0, 2 * np.pi)
            place = distance * np.sin(angle), distance * np.cos(angle)
            contrast = result.reaching(distance, STATED)
            found[number, k] = recovered(observation, result, place, contrast, assumed, star)
        excluded += wrongly_excluded(design, actual, assumed, star, result, rng)
    share = found.mean(axis=0)
    error = np.sqrt(STATED * (1 - STATED) / epochs)
    print(f"  {name}: companions of the contrast stated for {100 * STATED:g}% found,")
    print("    by separation: " + ", ".join(f"{100 * one:.1f}" for one in share)
          + f" (+-{100 * error:.1f}), all {100 * found.mean():.1f}%")  # fmt: skip
    print(f"    contrast found half the time / of an expected gain of the threshold: "
          f"{np.mean(halves):.3f}")  # fmt: skip
    medians = np.mean(stated, axis=0)
    print("    median limits: "
          + ", ".join(f"{route} {one:.5f}" for route, one in zip(result.maps, medians, strict=True))
          + f"; profile wrongly excludes {100 * np.mean(excluded):.1f}% "
          f"(stated {100 * (1 - STATED):g})")  # fmt: skip
    return share


def epoch_limits(observation, errors: ErrorModel, design: Design, rng) -> Limits:
    return limits(
        observation, field=FIELD * design.resolution * u.mas, stars=STARS, errors=errors,
        positions=33, injections=100, confidence=STATED, rng=rng,
    )  # fmt: skip


def recovered(observation, result: Limits, place, contrast: float, errors, star) -> bool:
    """Whether a blind search finds a companion put into the data at `place` (mas)."""
    companion = Companion(x=place[0], y=place[1], contrast=contrast, **star)
    lit = inject(observation, companion)
    field = prepared(observation, errors, result.field * u.mas)
    one = search(lit, field=result.field * u.mas, stars=STARS, errors=errors, noise_searches=0)
    there = same_lobe(field, place, (one.best.x_mas, one.best.y_mas))
    return bool(one.statistic >= result.threshold and there)


def wrongly_excluded(design, actual, assumed, star, result: Limits, rng) -> list[bool]:
    """Whether the profile limits of a new night exclude a companion that it has."""
    rows, columns = np.nonzero(np.isfinite(result.maps["recovered"]))
    k = rng.integers(len(rows))
    contrast = float(result.maps["recovered"][rows[k], columns[k]]) / 2
    x, y = result.axis[columns[k]], result.axis[rows[k]]
    night, _ = design.observe(rng, actual, x=x, y=y, contrast=contrast, **star)
    field = prepared(night, assumed, result.field * u.mas)
    white = field.project(
        field.covariance.whiten(field.response.at(np.array([x]), np.array([y])).T)
    )
    scale2 = Stack([field]).scale[0] ** 2
    n, d = white[:, 0] @ field.project(field.residual), white[:, 0] @ white[:, 0]
    return [
        bool(profile_limit(np.array([n / scale2]), np.array([d / scale2]), STATED)[0] < contrast)
    ]
