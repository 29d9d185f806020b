"""Detection limits against companions put into simulated epochs.

Recovery: companions of the contrast stated for 90 per cent completeness are put into epochs without
companion, at random position angles, and looked for in the maps of a search; in every fourth epoch
some of them by the whole search too, which must say the same. With white noise, with correlated
noise that is known, and with correlated noise taken for white. Then in few and poor data, whose
limits are beyond what is linear in the contrast: there in the noise of another epoch, since data
that are multiplied by a bright pair's have smaller errors than before.
Threshold: the contrast found half the time over the one whose expected chi-square gain is the
threshold. Exclusion: how often the profile limit excludes a companion that is there.
"""

from dataclasses import dataclass, replace

import astropy.units as u
import numpy as np

from orbits.companion.covariance import ErrorModel
from orbits.companion.exclusion import profile_limit
from orbits.companion.limit_result import Limits
from orbits.companion.limits import Wanted
from orbits.companion.night import Night, NightSearch
from orbits.companion.saturation import saturation, unsaturated
from orbits.companion.search import FALSE_ALARM, choose_grid
from orbits.companion.significance import scaled
from orbits.companion.stack import Stack
from orbits.companion.trials import looked_for, same_lobe, with_companion
from orbits.observation import Observation

from ._epochs import Design
from .search import NOISE, STARS

STATED = 0.9
FIELD = 6.0
"""Half-width of the fields, in units of the resolution, wavelength over the longest baseline."""
SEPARATIONS = (1.2, 2.1, 3.0, 3.9, 4.8, 5.7)
"""In the same units."""
ANGLES = 4
"""Companions at each separation of each epoch."""
SEARCHED = 4
"""Of so many epochs, the first companion of each separation is searched for in one."""
WANTED = Wanted(STATED, STATED, FALSE_ALARM, positions=49, noise_searches=1000, injections=100)
POORER = 8.0
"""By how much the errors of poor data are larger."""


def run(fraction: float) -> None:
    """Print claims and findings for `fraction` of the full numbers of epochs."""
    rng = np.random.default_rng(2027)
    epochs = max(int(200 * fraction), 10)
    design = Design.of("4 telescopes", exposures=3, channels=6)
    cases = {name: Case(design, *errors) for name, errors in NOISE.items()}
    few = poorer(Design.of("4 telescopes", exposures=3, channels=2))
    cases["few and poor data"] = Case(few, *NOISE["white"], fresh=True)
    for name, case in cases.items():
        recovery(name, case, epochs, rng)


@dataclass(frozen=True)
class Case:
    """Epochs of one kind."""

    design: Design
    actual: ErrorModel
    assumed: ErrorModel
    fresh: bool = False
    """Companions are put into the noise of another epoch."""

    @property
    def star(self) -> dict[str, float]:
        """Parameters of the primary."""
        return {"primary_diameter": 0.5 * self.design.resolution}

    def observe(self, rng: np.random.Generator, **companion: float) -> Observation:
        """An epoch, with or without companion."""
        return self.design.observe(rng, self.actual, **self.star, **companion)[0]

    def lit(self, night: Night, rng: np.random.Generator, **companion: float) -> Observation:
        """The epoch `night`, or another one, with a companion."""
        if self.fresh:
            return self.observe(rng, **companion)
        return with_companion(night, **companion)

    @property
    def search(self) -> NightSearch:
        """How epochs are searched."""
        grid = choose_grid(self.design.blank, FIELD * self.design.resolution * u.mas)
        return NightSearch(grid=grid, stars=STARS, errors=self.assumed)


def poorer(design: Design) -> Design:
    """`design` with larger errors."""
    v2, t3 = (replace(t, error=POORER * t.error) for t in (design.blank.v2, design.blank.t3))
    return replace(design, blank=replace(design.blank, v2=v2, t3=t3))


def recovery(name: str, case: Case, epochs: int, rng: np.random.Generator) -> np.ndarray:
    """Share of companions of the stated contrast that the search finds, by separation."""
    search = case.search
    found = np.zeros((epochs, ANGLES, len(SEPARATIONS)), dtype=bool)
    halves, stated, excluded, alike = [], [], [], []
    print(f"  {name}: companions of the contrast stated for {100 * STATED:g}% found", flush=True)
    for number in range(epochs):
        night = search.night(case.observe(rng))
        result = WANTED.limits([night], rng)
        stated.append([np.median(one) for one in result.maps.values()])
        for k, separation in enumerate(SEPARATIONS):
            distance = separation * case.design.resolution
            ring = result.ring(distance)
            halves.append(result.reaching(distance, 0.5) / np.median(result.expected[ring]))
            for one, angle in enumerate(rng.uniform(0, 2 * np.pi, ANGLES)):
                there = {
                    "x": distance * np.sin(angle), "y": distance * np.cos(angle),
                    "contrast": result.reaching(distance, STATED),
                }  # fmt: skip
                lit = case.lit(night, rng, **there)
                there["threshold"] = result.threshold
                found[number, one, k] = in_maps(search, night, lit, **there)
                if one == 0 and number % SEARCHED == 0:
                    whole = looked_for(search, night, lit, **there)
                    alike.append(whole.found == found[number, one, k])
        excluded.append(wrongly_excluded(case, result, rng))
        if number + 1 in {epochs // 4, epochs // 2, 3 * epochs // 4, epochs}:
            shares(found[: number + 1])
    print(f"    whole searches say the same in {np.sum(alike)} of {len(alike)} cases")
    print(f"    contrast found half the time / of an expected gain of the threshold: "
          f"{np.mean(halves):.3f}")  # fmt: skip
    medians = np.mean(stated, axis=0)
    print("    median limits: "
          + ", ".join(f"{route} {one:.5f}" for route, one in zip(result.maps, medians, strict=True))
          + f"; profile wrongly excludes {100 * np.mean(excluded):.1f}% "
          f"(stated {100 * (1 - STATED):g})", flush=True)  # fmt: skip
    return found.mean(axis=(0, 1))


def in_maps(
    search: NightSearch, night: Night, lit: Observation, *, x: float, y: float, contrast: float,
    threshold: float,
) -> bool:  # fmt: skip
    """Whether the highest peak of the maps of `lit` is claimed, and on the lobe of the place."""
    field = search.night(lit).field
    gain = field.faint().gain
    row, column = np.unravel_index(np.argmax(gain), gain.shape)
    if scaled(field, gain, field.chi2) < threshold:
        return False
    return same_lobe(night.field, (x, y), (field.grid.axis[column], field.grid.axis[row]))


def shares(found: np.ndarray) -> None:
    """Print what was found in the epochs so far, (n, ANGLES, separations)."""
    each = found.mean(axis=1)  # those of one epoch share its noise
    share, error = (100 * one for one in (each.mean(axis=0), each.std(axis=0) / len(each) ** 0.5))
    whole = 100 * each.mean(axis=1).std() / len(each) ** 0.5
    listed = ", ".join(f"{one:.1f}" for one in share)
    print(f"    {len(found)} epochs, by separation: {listed} (+-{error.mean():.1f}), "
          f"all {share.mean():.1f} +- {whole:.1f}%", flush=True)  # fmt: skip


def wrongly_excluded(case: Case, result: Limits, rng: np.random.Generator) -> bool:
    """Whether the profile limit of a new night excludes a companion that it has."""
    rows, columns = np.nonzero(np.isfinite(result.maps["recovered"]))
    k = rng.integers(len(rows))
    contrast = float(result.maps["recovered"][rows[k], columns[k]]) / 2
    x, y = result.axis[columns[k]], result.axis[rows[k]]
    stack = Stack([case.search.night(case.observe(rng, x=x, y=y, contrast=contrast)).field])
    row, column = (np.abs(stack.grid.axis - at).argmin() for at in (y, x))
    place = np.array([row * stack.grid.side + column])
    n, d = stack.signal.ravel()[place], stack.sensitivity.ravel()[place]
    linear = profile_limit(n, d, STATED)
    return bool(unsaturated(linear, saturation(stack, place, linear, whole=True))[0] < contrast)
