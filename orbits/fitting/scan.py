"""The search for starts: period, eccentricity and periastron on a grid, all else solved linearly.

At each node the Thiele-Innes constants and, for each star, the two components of its velocity
amplitude follow from linear least squares together with the zero points. That the two share one
argument of periastron is left to the refinement. Where nights have alternatives or outliers, the
constants are first drawn from two positions and then improved by the positions that agree best
(Rousseeuw & Van Driessen 2006, Data Min. Knowl. Discov. 12, 29).
"""

import math
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import product

import numpy as np

from ..compiled import compiled
from ..kepler import eccentric_anomaly
from ..progress import SILENT, Silent
from .data import Data

ECCENTRICITIES = np.array([0.0, 0.3, 0.55, 0.75, 0.88, 0.95, 0.985])
PHASES = np.array([1, 8, 14, 22, 34, 56, 100])
"""Times of periastron that are tried for each eccentricity: about 4 for each half-width."""
OVERSAMPLING = 10
"""Steps in frequency for one turn over the span of the data."""
PAIRS = 6
"""Pairs of nights that the constants are drawn from where positions are in doubt."""
TABLE = 2048
"""Nodes of the tabulated orbital motion; linear between them, wrong by 1e-5 to 1e-3 at most."""
CUT = 16.0
"""With outliers, no night counts for more than this in chi-square."""
COARSENESS = 0.02
"""Error of the model between nodes, as a share of the typical separation: alternatives and
outliers are told apart with this beside the errors of the positions."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Scan:
    """Least chi-square at each period (over the phases) for each eccentricity tried."""

    period: np.ndarray
    """(F,) d."""
    eccentricity: np.ndarray
    """(L,)"""
    chi2: np.ndarray
    """(F, L)"""
    phase: np.ndarray
    """(F, L) mean anomaly at the reference time, rad, of the least chi-square."""

    def starts(self, most: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Period, eccentricity and phase of the lowest minima along the period, best first."""
        padded = np.pad(self.chi2, ((1, 1), (0, 0)), constant_values=np.inf)
        low = (self.chi2 <= padded[:-2]) & (self.chi2 < padded[2:])
        f, level = np.nonzero(low)
        best = np.argsort(self.chi2[f, level])[:most]
        f, level = f[best], level[best]
        return self.period[f], self.eccentricity[level], self.phase[f, level]


def scan(
    data: Data,
    *,
    cores: int = 1,
    rng: np.random.Generator,
    progress: Silent = SILENT,
) -> Scan:
    """Least chi-square over the grid of periods, eccentricities and phases."""
    frequency = frequencies(data)
    eccentricity, phases = _levels(data)
    motions = np.stack([_table(e) for e in eccentricity])
    tables = data.tables
    weights, seeds = _weights(data), _seeds(data, rng)
    cut = CUT if data.model.outliers else math.inf
    chi2 = np.empty((frequency.size, eccentricity.size))
    phase = np.empty_like(chi2)

    def work(part: slice) -> None:
        _scan(frequency[part], phases, motions, tables.places, tables.place_labels[:, 0], weights,
              seeds, cut, tables.speeds, tables.design, chi2[part], phase[part])  # fmt: skip

    pieces = np.array_split(np.arange(frequency.size), max(1, frequency.size // 100))
    parts = [slice(piece[0], piece[-1] + 1) for piece in pieces]
    with (
        ThreadPoolExecutor(cores) as pool,
        progress.task("scanning periods", total=len(parts)) as step,
    ):
        for _ in pool.map(work, parts):
            step()
    return Scan(period=1 / frequency, eccentricity=eccentricity, chi2=chi2, phase=phase)


def _levels(data: Data) -> tuple[np.ndarray, np.ndarray]:
    """The eccentricities to try, and how many phases of each."""
    if data.model.circular:
        return ECCENTRICITIES[:1], PHASES[:1]
    low, high = data.space.eccentricity
    inside = (low <= ECCENTRICITIES) & (high >= ECCENTRICITIES)
    if not inside.any():
        inside = np.arange(len(PHASES)) == np.abs(ECCENTRICITIES - (low + high) / 2).argmin()
    return ECCENTRICITIES[inside], PHASES[inside]


def frequencies(data: Data) -> np.ndarray:
    """Frequencies, 1/d: even steps set by the span, and even steps in ln P beyond a few spans."""
    shortest, longest = data.priors.period
    times = np.concatenate([data.tables.places[:, 0], data.tables.speeds[:, 0]])
    span = max(float(np.ptp(times)), 1e-3)
    step = 1 / (OVERSAMPLING * span)
    turn = OVERSAMPLING * step / 2  # below half a turn over the span, ln P takes over
    fast = np.arange(max(turn, 1 / longest), 1 / shortest, step)
    low = min(turn, 1 / shortest)
    count = max(0, math.ceil(math.log(max(low * longest, 1.0)) / 0.1))
    slow = np.geomspace(1 / longest, low, count, endpoint=False) if count else np.empty(0)
    return np.concatenate([slow, fast]) if fast.size or count else np.array([1 / shortest])


def linear_solution(data: Data, period: float, e: float, phase: float, rng: np.random.Generator):
    """Thiele-Innes constants (A, F, B, G) and amplitude vectors (4,) at one node of the grid."""
    table, tables = _table(e), data.tables
    constants, amplitudes = np.zeros(4), np.zeros(4 + tables.design.shape[1])
    if len(tables.places):
        _solve_positions(1 / period, phase, table, tables.places, tables.place_labels[:, 0],
                         _weights(data), _seeds(data, rng),
                         CUT if data.model.outliers else math.inf, constants)  # fmt: skip
    if len(tables.speeds):
        _solve_velocities(1 / period, phase, table, tables.speeds, tables.design, amplitudes)
    return constants, amplitudes[:4]


def _table(e: float) -> np.ndarray:
    """(TABLE + 1, 4): X, Y, cos v + e and -sin v over one turn of the mean anomaly from 0."""
    E = eccentric_anomaly(np.linspace(0, 2 * np.pi, TABLE + 1), e)
    minor = math.sqrt(1 - e * e)
    r = 1 - e * np.cos(E)
    return np.column_stack(
        [np.cos(E) - e, minor * np.sin(E), (1 - e * e) * np.cos(E) / r, -minor * np.sin(E) / r]
    )


def _weights(data: Data) -> np.ndarray:
    """(n, 3) inverse covariance wxx, wxy, wyy of each position."""
    cxx, cxy, cyy = data.tables.places[:, 3:6].T
    extra = coarse_error(data) ** 2
    cxx, cyy = cxx + extra, cyy + extra
    determinant = cxx * cyy - cxy**2
    return np.column_stack([cyy, -cxy, cxx]) / determinant[:, None]


def coarse_error(data: Data) -> float:
    """Error that positions are given, mas, while it is open which of them to believe."""
    if not doubtful(data):
        return 0.0
    return COARSENESS * math.sqrt(np.square(data.tables.places[:, 1:3]).sum(axis=1).mean())


def doubtful(data: Data) -> bool:
    """Whether nights have alternatives or may be outliers."""
    return len(data.tables.places) > 0 and (
        data.nights < len(data.tables.places) or data.model.outliers
    )


def _seeds(data: Data, rng: np.random.Generator) -> np.ndarray:
    """(k, 2) pairs of rows to start from; none where all positions can simply be used."""
    nights = data.tables.place_labels[:, 0]
    if not doubtful(data) or data.nights < 2:
        return np.empty((0, 2), dtype=np.int64)
    counts = np.bincount(nights)
    sure = np.flatnonzero(counts == 1)
    pool = sure if sure.size >= 2 else np.arange(counts.size)
    pairs = []
    for _ in range(PAIRS):
        one, two = rng.choice(pool, 2, replace=False)
        pairs += list(product(np.flatnonzero(nights == one), np.flatnonzero(nights == two)))
    return np.array(pairs, dtype=np.int64)


@compiled
def _scan(frequency, phases, tables, places, nights, weights, seeds, cut, speeds, design,
          chi2, phase):  # fmt: skip
    constants = np.empty(4)
    amplitudes = np.empty(4 + design.shape[1])
    for f in range(frequency.size):
        for level in range(phases.size):
            chi2[f, level] = math.inf
            for k in range(phases[level]):
                start = 2 * math.pi * k / phases[level]
                value = 0.0
                if places.shape[0]:
                    value += _solve_positions(frequency[f], start, tables[level], places, nights,
                                              weights, seeds, cut, constants)  # fmt: skip
                if speeds.shape[0]:
                    value += _solve_velocities(
                        frequency[f], start, tables[level], speeds, design, amplitudes
                    )
                if value < chi2[f, level]:
                    chi2[f, level], phase[f, level] = value, start


@compiled
def _look_up(table, time, frequency, phase, column):
    """Two neighbouring columns of the table at a time, linearly interpolated."""
    turns = time * frequency + phase / (2 * math.pi)
    at = (turns - math.floor(turns)) * (table.shape[0] - 1)
    i = min(int(at), table.shape[0] - 2)
    part = at - i
    return (
        table[i, column] + part * (table[i + 1, column] - table[i, column]),
        table[i, column + 1] + part * (table[i + 1, column + 1] - table[i, column + 1]),
    )


@compiled
def _solve_positions(frequency, phase, table, places, nights, weights, seeds, cut, constants):
    """Least chi-square of the positions at a node, and the constants (A, F, B, G) there."""
    n = places.shape[0]
    motion = np.empty((n, 2))
    for i in range(n):
        motion[i, 0], motion[i, 1] = _look_up(table, places[i, 0], frequency, phase, 0)
    use = np.ones(n, dtype=np.bool_)
    if seeds.shape[0] == 0:
        return _solve_chosen(motion, places, weights, use, constants)
    best, trial = math.inf, np.empty(4)
    for k in range(seeds.shape[0]):
        use[:] = False
        use[seeds[k, 0]] = use[seeds[k, 1]] = True
        value = math.inf
        for _ in range(4):
            _solve_chosen(motion, places, weights, use, trial)
            value = _choose(motion, places, nights, weights, trial, cut, use)
        if value < best:
            best = value
            for a in range(4):
                constants[a] = trial[a]
    return best


@compiled
def _choose(motion, places, nights, weights, constants, cut, use):
    """Mark each night's best row, unless it lies beyond the cut; returns chi-square."""
    total, row = 0.0, 0
    while row < places.shape[0]:
        night, least, which = nights[row], math.inf, row
        while row < places.shape[0] and nights[row] == night:
            dy = places[row, 2] - constants[0] * motion[row, 0] - constants[1] * motion[row, 1]
            dx = places[row, 1] - constants[2] * motion[row, 0] - constants[3] * motion[row, 1]
            value = (
                weights[row, 0] * dx * dx + 2 * weights[row, 1] * dx * dy
                + weights[row, 2] * dy * dy - 2 * places[row, 6]
            )  # fmt: skip
            use[row] = False
            if value < least:
                least, which = value, row
            row += 1
        use[which] = least < cut
        total += min(least, cut)
    return total


@compiled
def _solve_chosen(motion, places, weights, use, constants):
    """Weighted linear least squares for (A, F, B, G) from the rows marked; returns chi-square."""
    matrix, vector, square = np.zeros((4, 4)), np.zeros(4), 0.0
    for i in range(places.shape[0]):
        if not use[i]:
            continue
        x, y = places[i, 1], places[i, 2]
        wxx, wxy, wyy = weights[i, 0], weights[i, 1], weights[i, 2]
        north, east = wyy * y + wxy * x, wxy * y + wxx * x
        square += y * north + x * east
        p, q = motion[i, 0], motion[i, 1]
        vector[0] += p * north
        vector[1] += q * north
        vector[2] += p * east
        vector[3] += q * east
        pp, pq, qq = p * p, p * q, q * q
        matrix[0, 0] += wyy * pp
        matrix[1, 0] += wyy * pq
        matrix[1, 1] += wyy * qq
        matrix[2, 0] += wxy * pp
        matrix[2, 1] += wxy * pq
        matrix[3, 1] += wxy * qq
        matrix[2, 2] += wxx * pp
        matrix[3, 2] += wxx * pq
        matrix[3, 3] += wxx * qq
    matrix[3, 0] = matrix[2, 1]
    return square - _solve_in_place(matrix, vector, constants)


@compiled
def _solve_velocities(frequency, phase, table, speeds, design, amplitudes):
    """The same for the amplitude vectors K (cos w, sin w) of both stars and the zero points."""
    terms = design.shape[1]
    size = 4 + terms
    matrix, vector, square = np.zeros((size, size)), np.zeros(size), 0.0
    row = np.empty(size)
    for i in range(terms):
        matrix[4 + i, 4 + i] = 1.0
    for i in range(speeds.shape[0]):
        c, s = _look_up(table, speeds[i, 0], frequency, phase, 2)
        row[0], row[1] = speeds[i, 3] * c, speeds[i, 3] * s
        row[2], row[3] = speeds[i, 4] * c, speeds[i, 4] * s
        for k in range(terms):
            row[4 + k] = design[i, k]
        weight = 1 / speeds[i, 2]
        square += weight * speeds[i, 1] ** 2
        for a in range(size):
            scaled = weight * row[a]
            if scaled != 0:
                vector[a] += scaled * speeds[i, 1]
                for b in range(a + 1):
                    matrix[a, b] += scaled * row[b]
    return square - _solve_in_place(matrix, vector, amplitudes)


@compiled
def _solve_in_place(matrix, vector, solution):
    """Solve a symmetric system by Cholesky's method; returns solution . vector.

    A pivot that has lost all its digits belongs to a direction the data do not see: its unknown
    stays 0.
    """
    size = vector.size
    for i in range(size):
        before = matrix[i, i]
        for j in range(i + 1):
            value = matrix[i, j]
            for k in range(j):
                value -= matrix[i, k] * matrix[j, k]
            if i == j:
                matrix[i, i] = math.sqrt(value) if value > 1e-11 * before else math.inf
            else:
                matrix[i, j] = value / matrix[j, j]
    gain = 0.0
    for i in range(size):
        value = vector[i]
        for k in range(i):
            value -= matrix[i, k] * solution[k]
        solution[i] = value / matrix[i, i]
        gain += solution[i] ** 2
    for i in range(size - 1, -1, -1):
        value = solution[i]
        for k in range(i + 1, size):
            value -= matrix[k, i] * solution[k]
        solution[i] = value / matrix[i, i]
    return gain
