"""Injection and recovery without fits: the contrast at which the search finds a companion.

A faint companion put in at a place p with contrast f adds f K(x, p) to the map N(x) of the search,
with K(x, p) = s(x)^T P s(p) and s, P as in `maps`; K(p, p) = D(p). It needs no data, only the
design. In units of the error of the contrast the map of data with noise is

    Z(x) = a rho(x, p) + z(x),   a = f sqrt(D(p)),   rho = K(x, p) / sqrt(D(x) D(p)),

where z = N / sqrt(D) is the map of the noise alone. So one transform a place gives rho, one
transform a noise realisation gives z, and from the two follows for every place and realisation the
smallest a at which the search finds the companion:

- the peak on the lobe where it was put rises above the threshold of the false alarms, and
- above every other peak: the sidelobes of rho, each with its own noise, and the noise elsewhere.

Exact, for Gaussian noise of the covariance assumed, are the maps: rho and z are those that the
search itself makes. Approximations: (1) the data answer linearly to the contrast, which overstates
what V2 shows by the part 2 f; (2) noise shifts the peak of a companion by at most `_REACH`
steps and those of its sidelobes by one; (3) sidelobes below `FAINTEST` of the peak are taken for
noise elsewhere. `injection.found` does without any of them, by a search of the data themselves.
"""

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from ..compiled import compiled
from ..progress import SILENT, Silent
from .stack import COMPANION, Stack

LOBE = 0.5
"""A lobe is where rho stays above this; a companion found on the lobe of its place is found."""
FAINTEST = 0.4
"""The least rho of a sidelobe that is followed: at the usual thresholds a is near 5.5, and noise
(of a standard deviation of 1.1 between such places) would have to make up 3.3."""
_MOST_RIVALS = 40
_REACH = 6
"""Steps around a place, its lobe among them: the finest lobe is about two steps in radius."""
_SHIFT = 2
"""Steps around a sidelobe: it may move by one, and its height needs the neighbours there."""
_CLIMB = 2.0
"""Sigma that a peak of noise gains at most over its value a step away, to be looked at or not."""
_BATCH = 32
_LARGEST = 1e3
"""An amplitude in sigma that no noise hides."""
_HALVINGS = 10
_STEPS = 2
_SINGLE = 1e-3
"""Precision of rho: a thousandth of a sigma where sigma matters."""


@dataclass(frozen=True, eq=False)
class Lobes:
    """For P places, the peak that a companion there makes in the map and the sidelobes it makes."""

    place: np.ndarray
    """(P,) index of the place in the flattened grid."""
    own: np.ndarray
    """(P, 13, 13): rho around the place; 0 off its lobe and where a companion cannot be seen."""
    first: np.ndarray
    """(P + 1,): the sidelobes of place k are first[k] to first[k + 1]."""
    rival: np.ndarray
    """(R,) index of each sidelobe in the flattened grid."""
    rho: np.ndarray
    """(R, 5, 5): rho around it."""


def lobes(stack: Stack, place: np.ndarray, progress: Silent = SILENT) -> Lobes:
    """The lobes of companions at places given as indices of the flattened grid."""
    grid = stack.grid
    axis, norm = grid.axis, stack.normalisation.astype(np.float32)
    own = np.zeros((len(place), 2 * _REACH + 1, 2 * _REACH + 1), dtype=np.float32)
    batches = np.array_split(np.arange(len(place)), max(1, -(-len(place) // _BATCH)))
    rivals, around = [], []

    def follow(batch: np.ndarray) -> list[tuple[np.ndarray, np.ndarray]]:
        row, column = np.divmod(place[batch], grid.side)
        sidelobes = []
        for k, one in enumerate(responses(stack, axis[column], axis[row])):
            one *= norm
            top = one[row[k], column[k]]
            one *= 1 / top if top > 0 else 0.0
            index, patches = _lobes(one, row[k], column[k], own[batch[k]])
            order = np.argsort(-patches[:, _SHIFT, _SHIFT], kind="stable")[:_MOST_RIVALS]
            sidelobes.append((index[order], patches[order]))
        return sidelobes

    with (
        progress.task("companions on their own", len(place)) as tick,
        ThreadPoolExecutor(os.cpu_count()) as pool,
    ):
        for batch in pool.map(follow, batches):
            for index, patches in batch:
                rivals.append(index)
                around.append(patches)
            tick(len(batch))
    first = np.concatenate([[0], np.cumsum([len(index) for index in rivals])])
    return Lobes(place, own, first, np.concatenate(rivals), np.concatenate(around))


def responses(stack: Stack, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """(p, side, side) K over the field, in single precision, for companions at p places, mas."""
    total = np.zeros((len(x), stack.grid.side, stack.grid.side), dtype=np.float32)
    each = zip(stack.fields, stack.scale, stack.signatures(x, y), strict=True)
    for field, scale, white in each:
        u, v = field.response.u, field.response.v
        transform = stack.grid.transform(u, v, -(-len(x) // 2), _SINGLE)
        total += transform(field.waves(white)) * (field.beam / scale)
    return total


def critical_amplitudes(
    stack: Stack,
    companions: Lobes,
    threshold: float,
    count: int,
    rng: np.random.Generator,
    progress: Silent = SILENT,
) -> np.ndarray:
    """Smallest amplitude, in units of the error of the contrast, at which the search succeeds.

    Parameters
    ----------
    threshold : float
        The statistic of the search that makes a claim.
    count : int
        Number of noise realisations.

    Returns
    -------
    ndarray of shape (count, P)
        inf where no companion can be seen.
    """
    found = np.empty((count, len(companions.place)), dtype=np.float32)
    # Errors stated too small are made up for by the search itself, by division by the reduced
    # chi-square; errors stated too large are not.
    floor = 1 / np.mean(stack.scale**2)
    workers = os.cpu_count() or 1
    parts = np.array_split(np.arange(len(companions.place)), workers)

    def judge(part: np.ndarray, z: np.ndarray, claim: float, out: np.ndarray) -> None:
        if part.size:
            _critical(
                z, int(np.argmax(z)), claim, part[0], part[-1] + 1, companions.place,
                companions.own, companions.first, companions.rival, companions.rho, out,
            )  # fmt: skip

    with (
        progress.task("injecting and recovering", count) as tick,
        ThreadPoolExecutor(workers) as pool,
    ):
        for out, (z, chi2) in zip(found, stack.noise(count, rng), strict=True):
            claim = np.sqrt(threshold * max(floor, stack.reduced(chi2, COMPANION)))
            list(pool.map(lambda part, z=z, c=claim, out=out: judge(part, z, c, out), parts))
            tick()
    return found


@compiled
def _lobes(rho, row, column, own):
    """Fill `own` with the lobe of (row, column); indices and surroundings of the sidelobes."""
    side = rho.shape[0]
    lobe = np.zeros((side, side), dtype=np.bool_)
    waiting = [(row, column)]
    lobe[row, column] = True
    while len(waiting):
        i, j = waiting.pop()
        m, n = i - row + _REACH, j - column + _REACH
        if 0 <= m <= 2 * _REACH and 0 <= n <= 2 * _REACH:
            own[m, n] = rho[i, j]
        for m in range(max(i - 1, 0), min(i + 2, side)):
            for n in range(max(j - 1, 0), min(j + 2, side)):
                if rho[m, n] > LOBE and not lobe[m, n]:
                    lobe[m, n] = True
                    waiting.append((m, n))
    index = []
    for i in range(_SHIFT, side - _SHIFT):
        for j in range(_SHIFT, side - _SHIFT):
            r = rho[i, j]
            if r < FAINTEST or lobe[i, j]:
                continue
            if (
                r > rho[i, j - 1] and r >= rho[i, j + 1] and r > rho[i - 1, j]
                and r >= rho[i + 1, j] and r > rho[i - 1, j - 1] and r >= rho[i + 1, j + 1]
                and r > rho[i - 1, j + 1] and r >= rho[i + 1, j - 1]
            ):  # fmt: skip
                index.append(i * side + j)
    around = np.empty((len(index), 2 * _SHIFT + 1, 2 * _SHIFT + 1), dtype=np.float32)
    for k in range(len(index)):
        i, j = index[k] // side, index[k] % side
        around[k] = rho[i - _SHIFT : i + _SHIFT + 1, j - _SHIFT : j + _SHIFT + 1]
    return np.array(index, dtype=np.int64), around


@compiled
def _vertex(top, before, after):
    """How much higher than `top` a parabola through it and its neighbours is."""
    curvature = 2 * top - before - after
    slope = abs(after - before)
    return slope * slope / (8 * curvature) if slope < 2 * curvature else 0.0


@compiled
def _peak(a, rho, m, n, z, i, j):
    """Height of a rho + z about the pixel that is (m, n) in `rho` and (i, j) in `z`."""
    last = z.shape[0] - 1
    top = a * rho[m, n] + z[i, j]
    if not (
        0 < i < last and 0 < j < last and 0 < m < rho.shape[0] - 1 and 0 < n < rho.shape[1] - 1
    ):
        return top
    rise = _vertex(top, a * rho[m, n - 1] + z[i, j - 1], a * rho[m, n + 1] + z[i, j + 1])
    return (
        top + rise + _vertex(top, a * rho[m - 1, n] + z[i - 1, j], a * rho[m + 1, n] + z[i + 1, j])
    )


@compiled
def _own_height(a, rho, z, i, j):
    """Height of the highest peak on the lobe of the place (i, j)."""
    side = z.shape[0]
    best, m_best, n_best = -np.inf, 0, 0
    for m in range(max(0, _REACH - i), min(2 * _REACH + 1, side + _REACH - i)):
        for n in range(max(0, _REACH - j), min(2 * _REACH + 1, side + _REACH - j)):
            if rho[m, n] > 0:
                value = a * rho[m, n] + z[i + m - _REACH, j + n - _REACH]
                if value > best:
                    best, m_best, n_best = value, m, n
    return _peak(a, rho, m_best, n_best, z, i + m_best - _REACH, j + n_best - _REACH)


@compiled
def _rises_above(wanted, rho, z, i, j):
    """The smallest a at which a pixel on the lobe of the place (i, j) reaches `wanted`."""
    side = z.shape[0]
    least = np.inf
    for m in range(max(0, _REACH - i), min(2 * _REACH + 1, side + _REACH - i)):
        for n in range(max(0, _REACH - j), min(2 * _REACH + 1, side + _REACH - j)):
            if rho[m, n] > 0:
                least = min(least, (wanted - z[i + m - _REACH, j + n - _REACH]) / rho[m, n])
    return least


@compiled
def _rival_height(a, rho, z, i, j):
    """Height of the highest peak within a step of the sidelobe at (i, j)."""
    best, m_best, n_best = -np.inf, 0, 0
    for m in range(1, 2 * _SHIFT):
        for n in range(1, 2 * _SHIFT):
            value = a * rho[m, n] + z[i + m - _SHIFT, j + n - _SHIFT]
            if value > best:
                best, m_best, n_best = value, m, n
    return _peak(a, rho, m_best, n_best, z, i + m_best - _SHIFT, j + n_best - _SHIFT)


@compiled
def _critical(z, worst, claim, begin, end, place, own, first, rival, rho, found):
    """Smallest amplitudes at the places from `begin` to `end` that pass `claim` and all rivals."""
    side = z.shape[0]
    highest = z[worst // side, worst % side]
    for p in range(begin, end):
        i, j = place[p] // side, place[p] % side
        if own[p, _REACH, _REACH] == 0.0:
            found[p] = np.inf
            continue
        m, n = worst // side - i + _REACH, worst % side - j + _REACH
        near = 0 <= m <= 2 * _REACH and 0 <= n <= 2 * _REACH and own[p, m, n] > 0
        wanted = claim if near else max(claim, highest)
        a = max(0.0, _rises_above(wanted, own[p], z, i, j))
        for _ in range(_STEPS):  # the parabola adds a little to the highest pixel
            a = max(0.0, a + wanted - _own_height(a, own[p], z, i, j))
        found[p] = _above_rivals(a, z, own[p], i, j, first[p], first[p + 1], rival, rho)


@compiled
def _above_rivals(a, z, own, i, j, begin, end, rival, rho):
    """The smallest amplitude, `a` or more, at which the peak of a place beats its sidelobes."""
    side = z.shape[0]
    here = _own_height(a, own, z, i, j)
    for r in range(begin, end):
        m, n = rival[r] // side, rival[r] % side
        if a * rho[r, _SHIFT, _SHIFT] + z[m, n] < here - _CLIMB:
            continue
        if here > _rival_height(a, rho[r], z, m, n):
            continue
        low, high = a, a
        while high < _LARGEST:
            high += 1.0
            if _own_height(high, own, z, i, j) > _rival_height(high, rho[r], z, m, n):
                break
            low = high
        for _ in range(_HALVINGS):
            middle = (low + high) / 2
            if _own_height(middle, own, z, i, j) > _rival_height(middle, rho[r], z, m, n):
                high = middle
            else:
                low = middle
        a = high
        here = _own_height(a, own, z, i, j)
    return a
