"""A joint fit against plain nested sampling of the same priors with a NumPy likelihood.

The baseline shares no code with the package: ten parameters, the priors' own transform, Newton's
method for Kepler's equation, dynesty with its ordinary settings. Both are timed with the same
number of live points; marginals are compared at about equal effective sample size.
"""

import time

import astropy.units as u
import numpy as np
from astropy.time import Time
from scipy.special import ndtri

from orbits import Elements, Positions, Priors, Velocities, fit

from . import row

LIVE_POINTS = 500
NIGHTS, EPOCHS = 20, 40
START, SPAN = 60_000.0, 1500.0
ERROR_MAS, ERROR_KMS = 0.1, 0.3
PRIORS = Priors(
    period=(50.0, 200.0),
    semimajor_axis=(5.0, 100.0),
    eccentricity=(0.0, 0.95),
    amplitude=(1.0, 100.0),
    systemic=100.0,
)
NAMES = ("period_d", "eccentricity", "semimajor_axis_mas", "inclination_deg", "node_deg",
         "argument_deg", "periastron_mjd", "k1_kms", "k2_kms", "gamma_kms")  # fmt: skip
MIDDLE = START + SPAN / 2


def make_data(rng: np.random.Generator) -> tuple[Positions, Velocities]:
    """20 positions and 40 velocities of each star, of an invented binary."""
    kms = u.km / u.s
    orbit = Elements(
        period=104.0 * u.day,
        periastron=Time(60_010.0, format="mjd", scale="tdb"),
        eccentricity=0.35,
        semimajor_axis=20.0 * u.mas,
        inclination=137.0 * u.deg,
        node=40.0 * u.deg,
        argument=88.0 * u.deg,
    )
    night = np.concatenate([[START], np.sort(rng.uniform(START, START + SPAN, NIGHTS - 2)),
                            [START + SPAN]])  # fmt: skip
    x, y = orbit.offsets(Time(night, format="mjd", scale="tdb"))
    text = np.full(NIGHTS, "", dtype=object)
    positions = Positions(
        mjd=night,
        xy=np.column_stack([x.to_value(u.mas), y.to_value(u.mas)])
        + ERROR_MAS * rng.normal(size=(NIGHTS, 2)),
        covariance=np.tile(ERROR_MAS**2 * np.eye(2), (NIGHTS, 1, 1)),
        weight=np.ones(NIGHTS),
        night=np.array([str(i) for i in range(NIGHTS)], dtype=object),
        instrument=text,
        source=text,
        contrast=np.full(NIGHTS, np.nan),
        contrast_error=np.full(NIGHTS, np.nan),
    )
    epoch = rng.uniform(START, START + SPAN, EPOCHS)
    both = orbit.velocities(
        Time(epoch, format="mjd", scale="tdb"), k1=25 * kms, k2=27 * kms, gamma=12 * kms
    )
    text = np.full(2 * EPOCHS, "", dtype=object)
    velocities = Velocities(
        mjd=np.tile(epoch, 2),
        velocity=np.concatenate([v.to_value(kms) for v in both])
        + ERROR_KMS * rng.normal(size=2 * EPOCHS),
        error=np.full(2 * EPOCHS, ERROR_KMS),
        star=np.repeat([0, 1], EPOCHS),
        instrument=text,
        source=text,
    )
    return positions, velocities


def transform(cube: np.ndarray) -> np.ndarray:
    """The ten parameters, in the order of NAMES but for the phase in place of the periastron."""

    def logs(bounds, part):
        return bounds[0] * (bounds[1] / bounds[0]) ** part

    low, high = PRIORS.eccentricity
    return np.array(
        [
            logs(PRIORS.period, cube[0]),
            low + (high - low) * cube[1],
            logs(PRIORS.semimajor_axis, cube[2]),
            np.arccos(1 - 2 * cube[3]),
            2 * np.pi * cube[4],
            2 * np.pi * cube[5],
            2 * np.pi * cube[6],
            logs(PRIORS.amplitude, cube[7]),
            logs(PRIORS.amplitude, cube[8]),
            PRIORS.systemic * ndtri(cube[9]),
        ]
    )


def anomalies(mjd: np.ndarray, period: float, e: float, phase: float):
    """Eccentric anomaly by Newton's method."""
    m = (phase + 2 * np.pi * (mjd - MIDDLE) / period + np.pi) % (2 * np.pi) - np.pi
    E = m + 0.85 * e * np.sign(np.sin(m))
    for _ in range(30):
        step = (E - e * np.sin(E) - m) / (1 - e * np.cos(E))
        E -= step
        if np.abs(step).max() < 1e-12:
            break
    return E


def log_likelihood(parameters, positions: Positions, velocities: Velocities) -> float:
    """ln of the likelihood in plain NumPy."""
    period, e, a, i, node, w, phase, k1, k2, gamma = parameters
    E = anomalies(positions.mjd, period, e, phase)
    v = 2 * np.arctan2(np.sqrt(1 + e) * np.sin(E / 2), np.sqrt(1 - e) * np.cos(E / 2))
    r = a * (1 - e * np.cos(E))
    along, across = np.cos(v + w), np.sin(v + w) * np.cos(i)
    x = r * (along * np.sin(node) + across * np.cos(node))
    y = r * (along * np.cos(node) - across * np.sin(node))
    square = (np.square(positions.xy - np.column_stack([x, y])) / ERROR_MAS**2).sum()
    E = anomalies(velocities.mjd, period, e, phase)
    v = 2 * np.arctan2(np.sqrt(1 + e) * np.sin(E / 2), np.sqrt(1 - e) * np.cos(E / 2))
    shape = np.cos(v + w) + e * np.cos(w)
    model = gamma + np.where(velocities.star == 0, -k1, k2) * shape
    square += (np.square(velocities.velocity - model) / ERROR_KMS**2).sum()
    return (
        -0.5 * square
        - 2 * len(positions) * np.log(ERROR_MAS)
        - len(velocities) * np.log(ERROR_KMS)
        - 0.5 * (2 * len(positions) + len(velocities)) * np.log(2 * np.pi)
    )


def baseline(positions, velocities, rng):
    """Samples with their weights, ln evidence, its error, calls and seconds."""
    import dynesty

    begin = time.perf_counter()
    sampler = dynesty.NestedSampler(
        log_likelihood,
        transform,
        len(NAMES),
        nlive=LIVE_POINTS,
        logl_args=(positions, velocities),
        periodic=[4, 5, 6],
        rstate=rng,
    )
    sampler.run_nested(print_progress=False)
    seconds = time.perf_counter() - begin
    found = sampler.results
    samples = found.samples.copy()
    samples[:, 3:6] = np.degrees(samples[:, 3:6])
    phase = (samples[:, 6] + np.pi) % (2 * np.pi) - np.pi
    samples[:, 6] = MIDDLE - phase / (2 * np.pi) * samples[:, 0]
    weight = np.exp(found.logwt - found.logz[-1])
    return samples, weight, found.logz[-1], found.logzerr[-1], int(found.ncall.sum()), seconds


def run() -> None:
    """Print the ratio of the times and the differences of evidence and marginals."""
    rng = np.random.default_rng(8)
    positions, velocities = make_data(rng)
    data = {"velocities": velocities, "priors": PRIORS}
    fit(positions, **data, live_points=100, rng=rng)  # compiled and warm
    seconds = []
    for _ in range(3):
        begin = time.perf_counter()
        equal = fit(positions, **data, live_points=LIVE_POINTS, rng=rng)
        seconds.append(time.perf_counter() - begin)
    samples, weight, log_z, log_z_error, calls, slow = baseline(positions, velocities, rng)
    row(f"joint fit, {LIVE_POINTS} live points: baseline's time", slow / min(seconds), "of ours")
    account = equal.account
    row("the same: baseline's likelihood calls", calls / account["likelihood_calls"], "of ours")
    effective = weight.sum() ** 2 / np.square(weight).sum()
    fine = fit(positions, **data, live_points=int(effective / 2), rng=rng)
    account = fine.account
    combined = np.hypot(log_z_error, account["log_evidence_err"])
    row("difference of ln evidence", (account["log_evidence"] - log_z) / combined,
        f"combined errors (theirs {log_z:.2f} +- {log_z_error:.2f})")  # fmt: skip
    check = account["log_evidence_check"]
    combined = np.hypot(log_z_error, check["error"])
    row("the same by plain draws", (check["value"] - log_z) / combined, "combined errors")
    row("effective samples, ours", account["effective_samples"] / effective, f"of {effective:.0f}")
    noise = np.sqrt(1 / effective + 1 / account["effective_samples"])
    for name, values in zip(NAMES, samples.T, strict=True):
        mean = np.average(values, weights=weight)
        width = np.sqrt(np.average((values - mean) ** 2, weights=weight))
        mine = fine.samples[name]
        row(f"{name}: shift of the mean", (mine.mean() - mean) / width, f"sigma (+- {noise:.3f})")
        row(f"{name}: width", mine.std() / width, f"of theirs (+- {noise / np.sqrt(2):.3f})")
