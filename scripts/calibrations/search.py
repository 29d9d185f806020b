"""What the search of an epoch claims, against many simulated epochs.

Efficiency: root-mean-square errors over the Cramer-Rao bound, and the share of stated 68 per cent
intervals that hold the truth. False alarms: rate of claims over epochs without companion. Power:
the contrast found half the time over that of a matched filter that is told the position.
"""

from contextlib import suppress

import astropy.units as u
import numpy as np

from orbits.binary import Scene, model
from orbits.companion.covariance import Covariance, ErrorModel
from orbits.companion.epoch import SURFACE
from orbits.companion.maps import Field
from orbits.companion.search import Epoch, Stars, choose_grid, search
from orbits.companion.significance import FalseAlarms, noise_maxima, scaled
from orbits.errors import NothingFound
from orbits.sampling import Sampling

from ._epochs import STATIONS, Design

CORRELATED = ErrorModel(shared_baselines=True, v2_calibration=0.03, t3_calibration=np.radians(0.7))
NOISE = {"white": (ErrorModel(), ErrorModel()), "correlated": (CORRELATED, CORRELATED),
         "correlations ignored": (CORRELATED, ErrorModel())}  # fmt: skip
"""Name: (errors as they are, errors as the search takes them)."""


def run(fraction: float) -> None:
    """Print claims and findings for `fraction` of the full numbers of epochs."""
    rng = np.random.default_rng(2026)
    efficiency(max(int(500 * fraction), 20), rng)
    for name in NOISE:
        false_alarms(name, max(int(2000 * fraction), 50), rng)
    power(max(int(1000 * fraction), 50), rng)


def efficiency(epochs: int, rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Errors over the Cramer-Rao bound, and over the stated errors, of `epochs` epochs."""
    designs = [Design.of(name, exposures=4, channels=6) for name in STATIONS]
    bound, stated, elsewhere, weak, lost = [], [], 0, 0, 0
    while len(bound) < epochs:
        design = designs[rng.integers(len(designs))]
        errors = CORRELATED if rng.random() < 0.5 else ErrorModel()
        truth = random_binary(design, rng)
        observation, covariance = design.observe(rng, errors, **truth)
        floor = cramer_rao(design, covariance, truth)
        if truth["contrast"] < 8 * floor[2]:
            weak += 1
            continue
        # The bound counts what is fitted: the diameters are not where the primary is a point.
        result = search(
            observation, field=FIELD * design.resolution * u.mas, errors=errors, noise_searches=0,
            diameter=None if truth["primary_diameter"] else 0 * u.mas,
        )  # fmt: skip
        best, miss = result.best, misses(result.best, truth)
        if np.hypot(*miss[:2]) > design.resolution / 2:
            # Another fringe: an error that no local bound knows of, told apart here.
            elsewhere += 1
            near = [np.hypot(*misses(one, truth)[:2]) for one in result.alternatives]
            lost += min(near, default=np.inf) > design.resolution / 2
            continue
        bound.append(miss / floor)
        own = (
            best.separation_error_mas,
            best.separation_mas * np.radians(best.position_angle_error_deg),
        )
        stated.append(miss / [*own, best.contrast_error])
    bound, stated = np.array(bound), np.array(stated)
    print(f"{epochs} epochs with companions above 8 sigma ({weak} fainter ones were not searched)")
    print(f"  best on another fringe: {elsewhere}; truth not among the alternatives: {lost}")
    rms, inside = np.sqrt((bound**2).mean(axis=0)), (np.abs(stated) < 1).mean(axis=0)
    for k, name in enumerate(("separation", "position angle", "contrast")):
        print(f"  {name:<15} rms error / Cramer-Rao bound {rms[k]:.3f} "
              f"(+-{1 / np.sqrt(2 * epochs):.3f}), 68.3% intervals hold {100 * inside[k]:.1f}% "
              f"(+-{46.5 / np.sqrt(epochs):.1f})")  # fmt: skip
    return {"rms": rms, "inside": inside, "elsewhere": elsewhere / epochs, "lost": lost / epochs}


FIELD = 8.0
"""Half-width of the fields, in units of the resolution."""


def random_binary(design: Design, rng: np.random.Generator) -> dict[str, float]:
    """A pair anywhere in the field, beyond the resolution; contrasts from 0.003 to 0.9.

    Half of the companions of resolved primaries are points, the others discs of the primary's
    surface brightness.
    """
    place = random_place(design, rng)
    diameter = 0.0 if rng.random() < 0.3 else float(design.resolution * rng.uniform(0.2, 0.9))
    contrast = float(np.exp(rng.uniform(np.log(0.003), np.log(0.9))))
    return {
        **place,
        "contrast": contrast,
        "primary_diameter": diameter,
        "diameter": float(np.sqrt(contrast)) * diameter * rng.integers(2),
    }


def random_place(design: Design, rng: np.random.Generator) -> dict[str, float]:
    """A place anywhere in the field, beyond the resolution, mas."""
    separation = design.resolution * rng.uniform(1.2, 0.9 * FIELD)
    angle = rng.uniform(0, 2 * np.pi)
    return {"x": separation * np.sin(angle), "y": separation * np.cos(angle)}


def misses(candidate, truth: dict[str, float]) -> np.ndarray:
    """Errors along and across the true position angle (mas), and of the contrast."""
    east, north = truth["x"], truth["y"]
    radius = np.hypot(east, north)
    dx, dy = candidate.x_mas - east, candidate.y_mas - north
    along, across = (dx * east + dy * north) / radius, (dx * north - dy * east) / radius
    return np.array([along, across, candidate.contrast - truth["contrast"]])


def cramer_rao(design: Design, covariance: Covariance, truth: dict[str, float]) -> np.ndarray:
    """Least standard errors along and across the position angle (mas), and of the contrast.

    From the Fisher matrix of all fitted parameters at the truth, with the prior of the square of
    the companion's diameter; beside a point nothing has a diameter.
    """
    scene = Scene()
    primary = truth["primary_diameter"]
    names = ["x", "y", "contrast"] + ["primary_diameter", "diameter"] * bool(primary)
    # The square has a slope where the diameter has none.
    truth = {**truth, "diameter": max(truth["diameter"], 1e-3)}
    reach = 1.2 * float(np.hypot(truth["x"], truth["y"]))
    sampling = Sampling.of(design.blank, radius=reach)
    free = [scene.names.index(name) for name in names]
    white = covariance.whiten(model(scene, scene.vector(truth), sampling, free)[1])
    fisher = white.T @ white
    if primary:
        slope = 2 * truth["diameter"]
        fisher[-1] /= slope
        fisher[:, -1] /= slope
        fisher[-1, -1] += (primary**2 * min(1.0, SURFACE * truth["contrast"])) ** -2
    inverse = np.linalg.inv(fisher)
    unit = np.array([truth["x"], truth["y"]]) / np.hypot(truth["x"], truth["y"])
    across = np.array([unit[1], -unit[0]])
    place = inverse[:2, :2]
    return np.sqrt([unit @ place @ unit, across @ place @ across, inverse[2, 2]])


def false_alarms(name: str, epochs: int, rng: np.random.Generator) -> dict[float, float]:
    """Rates of claims among `epochs` epochs without companion, for two stated probabilities."""
    actual, assumed = NOISE[name]
    design = Design.of("4 telescopes", exposures=3, channels=6)
    star = {"primary_diameter": 0.5 * design.resolution}
    size = FIELD * design.resolution * u.mas
    first, _ = design.observe(rng, actual, **star)
    # Every epoch draws its own 1000 of a large bank of noise searches of the same field.
    bank = noise_maxima(prepared(first, assumed, size), max(10 * epochs, 3000), rng)
    chances = []
    for number in range(epochs):
        observation, _ = design.observe(rng, actual, **star)
        top = detection(observation, assumed, size)
        if number % 200 == 0:
            # The exact fits do not change the statistic of an epoch without companion.
            with suppress(NothingFound):  # no exact fit beats the single star: nothing to compare
                whole = search(observation, field=size, errors=assumed, noise_searches=0)
                np.testing.assert_allclose(whole.statistic, top, rtol=1e-9)
        alarms = FalseAlarms.fitted(rng.choice(bank, 1000, replace=False))
        chances.append(alarms.probability(top)[0])
    rates = {}
    for stated in (0.05, 0.01):
        rates[stated] = float(np.mean(np.array(chances) < stated))
        error = np.sqrt(stated * (1 - stated) / epochs)
        print(f"  {name}: stated {100 * stated:g}%: {100 * rates[stated]:.2f}% of {epochs} "
              f"(+-{100 * error:.2f})")  # fmt: skip
    return rates


def power(trials: int, rng: np.random.Generator) -> float:
    """Contrast found in half of the trials at 1 per cent false alarm, over a matched filter's."""
    design = Design.of("4 telescopes", exposures=3, channels=6)
    star = {"primary_diameter": 0.5 * design.resolution}
    size = FIELD * design.resolution * u.mas
    empty, _ = design.observe(rng, **star)
    field = prepared(empty, None, size)
    threshold = FalseAlarms.fitted(noise_maxima(field, 3000, rng)).threshold(0.01)
    strength, found = [], []
    for _ in range(trials):
        separation = design.resolution * rng.uniform(1.2, 0.9 * FIELD)
        angle = rng.uniform(0, 2 * np.pi)
        x, y = separation * np.sin(angle), separation * np.cos(angle)
        # A filter that knows the place sees contrast / error there: half the time above the root
        # of the threshold when their ratio is that root.
        error = 1 / np.sqrt(sensitivity_at(field, x, y))
        ratio = rng.uniform(0.75, 1.25)
        contrast = ratio * np.sqrt(threshold) * error
        observation, _ = design.observe(rng, x=x, y=y, contrast=contrast, **star)
        top = detection(observation, None, size)
        strength.append(ratio)
        found.append(top > threshold)
    half = half_point(np.array(strength), np.array(found))
    print(f"  contrast found half the time / that of a matched filter told the place: {half:.3f}"
          f" (threshold {threshold:.1f}, {trials} trials)")  # fmt: skip
    return half


def prepared(observation, errors: ErrorModel | None, size: u.Quantity) -> Field:
    """The field of an epoch as the search prepares it."""
    epoch = Epoch(observation, STARS, choose_grid(observation, size), errors, 1, True)
    return epoch.field(epoch.null(None))


STARS = Stars(fixed={"diameter": 0.0}, free=("primary_diameter",))


def detection(observation, errors: ErrorModel | None, size: u.Quantity) -> float:
    """The statistic that decides a claim."""
    field = prepared(observation, errors, size)
    return scaled(field, field.faint().gain, field.chi2)


def sensitivity_at(field: Field, x: float, y: float) -> float:
    """D at a single position, from its definition."""
    white = field.project(
        field.covariance.whiten(field.response.at(np.array([x]), np.array([y])).T)
    )
    return float((white**2).sum())


def half_point(strength: np.ndarray, found: np.ndarray) -> float:
    """Where a logistic curve through yes-or-no trials passes one half."""
    from scipy.optimize import minimize

    def cost(parameters: np.ndarray) -> float:
        score = np.exp(parameters[1]) * (strength - parameters[0])
        return float(np.logaddexp(0, -np.where(found, score, -score)).sum())

    return float(minimize(cost, [1.0, np.log(8.0)], method="Nelder-Mead").x[0])
