"""Simulation-based calibration of orbit fits (Talts et al. 2018, arXiv 1804.06788).

Systems are drawn from the priors, data from the systems, and posteriors from the data. The rank of
each true value among independent samples of its posterior is then uniform, for every quantity:
any bias, any width too small or too large would bend the distribution of the ranks.
"""

from collections.abc import Callable
from dataclasses import dataclass

import astropy.units as u
import numpy as np
from astropy.time import Time
from scipy.stats import chi2

from orbits import Elements, Parallax, Positions, Priors, Velocities, fit
from orbits.fitting.solution import Solution
from orbits.masses import projected_axis, single_lined_masses

SYSTEMS = 300
SAMPLES = 99
BINS = 10

PRIORS = Priors(
    period=(30.0, 300.0),
    semimajor_axis=(5.0, 50.0),
    eccentricity=(0.0, 0.9),
    amplitude=(5.0, 50.0),
    systemic=20.0,
)
PARALLAX = Parallax(value=20.0, error=1.0)
START, SPAN = 60_000.0, 400.0


@dataclass(frozen=True, kw_only=True)
class Kind:
    """A kind of data: how many nights and velocities, of which stars, within how many days."""

    nights: int
    epochs: int
    stars: tuple[int, ...]
    parallax: Parallax | None
    span: float = SPAN


KINDS = {
    "positions": Kind(nights=10, epochs=0, stars=(), parallax=None),
    "single-lined": Kind(nights=10, epochs=15, stars=(0,), parallax=PARALLAX),
    "double-lined": Kind(nights=10, epochs=15, stars=(0, 1), parallax=None),
}

Truth = dict[str, float]


def draw_truth(kind: Kind, rng: np.random.Generator) -> Truth:
    """One system from the priors, drawn without any help of the fit's own code."""
    while True:
        e = rng.uniform(*PRIORS.eccentricity)
        truth = {
            "period_d": log_uniform(PRIORS.period, rng),
            "eccentricity": e,
            "semimajor_axis_mas": log_uniform(PRIORS.semimajor_axis, rng),
            "inclination_deg": np.degrees(np.arccos(rng.uniform(-1, 1))),
            "node_deg": rng.uniform(0, 360),
            "argument_deg": rng.uniform(0, 360),
            "phase": rng.uniform(0, 1),
        }
        for star in kind.stars:
            truth[f"k{star + 1}_kms"] = log_uniform(PRIORS.amplitude, rng)
        if kind.stars:
            truth["gamma_kms"] = rng.normal(0, PRIORS.systemic)
        if kind.parallax is None:
            break
        parallax = rng.normal(kind.parallax.value, kind.parallax.error)
        share = projected_axis(truth["period_d"], e, truth["k1_kms"]) / (
            truth["semimajor_axis_mas"] / parallax * np.sin(np.radians(truth["inclination_deg"]))
        )
        if parallax > 0 and share < 1:  # the prior knows that both masses are positive
            truth["parallax_mas"] = parallax
            break
    return truth


def log_uniform(bounds: tuple[float, float], rng: np.random.Generator) -> float:
    """A number whose logarithm is uniform."""
    return float(np.exp(rng.uniform(*np.log(bounds))))


def simulate(truth: Truth, kind: Kind, rng: np.random.Generator):
    """Positions and velocities of a system; the errors differ from night to night."""
    elements = Elements(
        period=truth["period_d"] * u.day,
        periastron=Time(
            START + SPAN / 2 - truth["phase"] * truth["period_d"], format="mjd", scale="tdb"
        ),
        eccentricity=truth["eccentricity"],
        semimajor_axis=truth["semimajor_axis_mas"] * u.mas,
        inclination=truth["inclination_deg"] * u.deg,
        node=truth["node_deg"] * u.deg,
        argument=truth["argument_deg"] * u.deg,
    )
    n = kind.nights
    middle = START + SPAN / 2
    mjd = middle + kind.span * np.concatenate([[-0.5, 0.5], rng.uniform(-0.5, 0.5, n - 2)])
    x, y = elements.offsets(Time(mjd, format="mjd", scale="tdb"))
    axes = rng.uniform(0.2, 1.0, (n, 2))
    turn = rng.uniform(0, np.pi, n)
    rotation = np.moveaxis(
        np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]), 2, 0
    )
    covariance = rotation @ (axes[:, :, None] ** 2 * np.eye(2)) @ np.swapaxes(rotation, 1, 2)
    noise = np.einsum("nij,nj->ni", rotation, axes * rng.normal(size=(n, 2)))
    positions = Positions(
        mjd=mjd,
        xy=np.column_stack([x.to_value(u.mas), y.to_value(u.mas)]) + noise,
        covariance=covariance,
        weight=np.ones(n),
        night=np.array([str(i) for i in range(n)], dtype=object),
        instrument=np.full(n, "", dtype=object),
        source=np.full(n, "", dtype=object),
        contrast=np.full(n, np.nan),
        contrast_error=np.full(n, np.nan),
    )
    return positions, _velocities(elements, truth, kind, rng) if kind.stars else None


def _velocities(elements, truth, kind, rng) -> Velocities:
    times = rng.uniform(START, START + SPAN, kind.epochs)
    kms = u.km / u.s
    both = elements.velocities(
        Time(times, format="mjd", scale="tdb"),
        k1=truth["k1_kms"] * kms,
        k2=truth.get("k2_kms", 0.0) * kms,
        gamma=truth["gamma_kms"] * kms,
    )
    count = kind.epochs * len(kind.stars)
    error = rng.uniform(0.5, 2.0, count)
    clean = np.concatenate([both[star].to_value(kms) for star in kind.stars])
    return Velocities(
        mjd=np.tile(times, len(kind.stars)),
        velocity=clean + error * rng.normal(size=count),
        error=error,
        star=np.repeat(kind.stars, kind.epochs),
        instrument=np.full(count, "", dtype=object),
        source=np.full(count, "", dtype=object),
    )


def quantities(table: dict[str, np.ndarray], kind: Kind) -> dict[str, np.ndarray]:
    """What is ranked: elements and masses, angles cut at a fixed place."""
    half = 360.0 if kind.stars else 180.0
    node = np.asarray(table["node_deg"])
    shift = np.floor(node / half) * half
    made = {
        "period": table["period_d"],
        "eccentricity": table["eccentricity"],
        "semimajor axis": table["semimajor_axis_mas"],
        "inclination": table["inclination_deg"],
        "node": node - shift,
        "argument": (np.asarray(table["argument_deg"]) - shift) % 360.0,
        "phase": np.asarray(table["phase"]) % 1.0,
    }
    for name in ("k1_kms", "k2_kms", "gamma_kms", "parallax_mas", "primary_msun", "companion_msun"):
        if name in table:
            made[name.partition("_")[0] if "msun" not in name else name[:-5]] = table[name]
    return made


def with_masses(truth: Truth, kind: Kind) -> Truth:
    """The truth, with the masses that follow from it by Kepler's third law."""
    from orbits.masses import double_lined_masses

    elements = (truth["period_d"], truth["eccentricity"], np.radians(truth["inclination_deg"]))
    if kind.parallax is not None:
        found = single_lined_masses(
            *elements, truth["k1_kms"], truth["semimajor_axis_mas"], truth["parallax_mas"]
        )
    elif len(kind.stars) == 2:
        found = double_lined_masses(*elements, truth["k1_kms"], truth["k2_kms"])
    else:
        return truth
    return truth | {"primary_msun": float(found[0]), "companion_msun": float(found[1])}


def ranks(
    kind: Kind, rng: np.random.Generator, *, solve: Callable[..., Solution] = fit
) -> dict[str, int]:
    """Rank, 0 to SAMPLES, of each true value of one system among posterior samples."""
    return solved_ranks(kind, rng, solve=solve)[0]


def solved_ranks(
    kind: Kind, rng: np.random.Generator, *, solve: Callable[..., Solution] = fit
) -> tuple[dict[str, int], Solution]:
    """The same, and the solution that they come from."""
    truth = draw_truth(kind, rng)
    positions, velocities = simulate(truth, kind, rng)
    solution = solve(
        positions,
        velocities=velocities,
        parallax=kind.parallax,
        priors=PRIORS,
        live_points=300,
        rng=rng,
    )
    samples = solution.samples.sample(SAMPLES, random_state=rng)
    table = {name: samples[name].to_numpy() for name in samples}
    table["phase"] = (START + SPAN / 2 - table["periastron_mjd"]) / table["period_d"]
    true = quantities(with_masses(truth, kind), kind)
    found = {
        name: int((values < true[name]).sum())
        for name, values in quantities(table, kind).items()
        if name in true
    }
    return found, solution


def uniformity(found: list[int]) -> float:
    """p of a chi-square test that ranks are uniform."""
    counts = np.histogram(found, bins=BINS, range=(0, SAMPLES + 1))[0]
    expected = len(found) / BINS
    return float(chi2.sf(((counts - expected) ** 2 / expected).sum(), BINS - 1))


def run(fraction: float) -> None:
    """Print p of uniform ranks, before and after correction for the number of tests."""
    count = max(int(SYSTEMS * fraction), BINS)
    rng = np.random.default_rng(20_260_401)
    results: dict[str, float] = {}
    for label, kind in KINDS.items():
        table = [ranks(kind, rng) for _ in range(count)]
        for name in table[0]:
            found = [row[name] for row in table]
            results[f"{label}: {name}"] = uniformity(found)
            print(
                f"{label:<14} {name:<16} p = {results[f'{label}: {name}']:.3f}   "
                f"mean rank {np.mean(found) / SAMPLES:.3f} (0.5 +- {0.289 / np.sqrt(count):.3f})",
                flush=True,
            )
    worst = min(results, key=results.get)
    corrected = min(1.0, results[worst] * len(results))
    print(f"{count} systems of each kind; smallest p {results[worst]:.4f} ({worst}),")
    print(f"corrected for {len(results)} tests (Bonferroni): {corrected:.3f}; claimed: above 0.01")
