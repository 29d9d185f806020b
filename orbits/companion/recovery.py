"""Injection and recovery without fits: the contrast at which the search finds a companion.

A faint companion put in at a place p with contrast f adds f K(x, p) to the map N(x) of the search,
with K(x, p) = s(x)^T P s(p) and s, P as in `maps`; K(p, p) = D(p). It needs no data, only the
design. In units of the error of the contrast the map of data with noise is

    Z(x) = a rho(x, p) + z(x),   a = f sqrt(D(p)),   rho = K(x, p) / sqrt(D(x) D(p)),

where z = N / sqrt(D) is the map of the noise alone. So one transform a place gives rho, one
transform a noise realisation gives z, and from the two follows for every place and realisation the
smallest a at which the search finds the companion:

- the peak on the lobe where it was put rises above the threshold of the false alarms, and
- above every other peak: the sidelobes of rho, each with its own noise, and the peaks of the noise,
  each lifted by rho. Even where rho is 0.3 a few hundred of these cost a twentieth of the finds.

Exact, for Gaussian noise of the covariance assumed, are the maps: rho and z are those that the
search itself makes. Approximations: (1) the data answer linearly to the contrast, which
`saturation` puts right; (2) a rival's peak is within a step of that of the sidelobe, or of the
noise, which makes it; (3) noise below `_HOT` makes no rival but on a sidelobe. `trials` does
without any of them, by searches of the data themselves.
"""

import os
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from ..compiled import compiled
from ..progress import SILENT, Silent
from .stack import COMPANION, Stack

LOBE = 0.5
"""A lobe is where rho stays above this; a companion found on the lobe of its place is found."""
TWIN = 0.99
"""A place of such a rho cannot be told from that of the companion: without phases the opposite one.
What is found there is found, and listed with its twin."""
_HOT = 1.5
"""Noise, in sigma, from which a peak of it may be taken for the companion."""
_CLIMB = 1.5
"""Sigma that a peak gains at most over its value a step away, to be looked at or not."""
_BATCH = 32
_MOST_PIXELS = 100_000_000
"""Of noise maps that are kept at a time."""
_LARGEST = 1e3
"""An amplitude in sigma that no noise hides."""
_HALVINGS = 10
_STEPS = 2
_SINGLE = 1e-3
"""Precision of rho: a thousandth of a sigma where sigma matters."""


def critical_amplitudes(
    stack: Stack,
    place: np.ndarray,
    threshold: float,
    count: int,
    rng: np.random.Generator,
    progress: Silent = SILENT,
) -> np.ndarray:
    """Smallest amplitude, in units of the error of the contrast, at which the search succeeds.

    Parameters
    ----------
    place : ndarray of int, shape (P,)
        Indices of the flattened grid.
    threshold : float
        The statistic of the search that makes a claim.
    count : int
        Number of noise realisations.

    Returns
    -------
    ndarray of shape (count, P)
        inf where no companion can be seen.
    """
    found = np.empty((count, len(place)), dtype=np.float32)
    at_a_time = max(1, _MOST_PIXELS // stack.grid.side**2)
    parts = [min(at_a_time, count - start) for start in range(0, count, at_a_time)]
    with progress.task("injecting and recovering", len(parts) * len(place)) as tick:
        start = 0
        for part in parts:
            noise = _Noise(stack, threshold, part, rng)
            found[start : start + part] = _recovered(stack, place, noise, tick)
            start += part
    return found


def responses(stack: Stack, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """(p, side, side) K over the field, in single precision, for companions at p places, mas."""
    total = np.zeros((len(x), stack.grid.side, stack.grid.side), dtype=np.float32)
    each = zip(stack.fields, stack.scale, stack.signatures(x, y), strict=True)
    for field, scale, white in each:
        u, v = field.response.u, field.response.v
        transform = stack.grid.transform(u, v, -(-len(x) // 2), _SINGLE)
        total += transform(field.waves(white)) * (field.beam / scale)
    return total


class _Noise:
    """Flattened maps of noise alone, with their peaks and with what a claim takes in each."""

    def __init__(self, stack: Stack, threshold: float, count: int, rng: np.random.Generator):
        # Errors stated too small are made up for by the search itself, by division by the reduced
        # chi-square; errors stated too large are not.
        floor = 1 / np.mean(stack.scale**2)
        self.z = np.empty((count, stack.grid.side**2), dtype=np.float32)
        self.claim = np.empty(count)
        """(count,) height of a peak that is claimed."""
        peaks = []
        for k, (z, chi2) in enumerate(stack.noise(count, rng)):
            self.z[k] = z.ravel()
            self.claim[k] = np.sqrt(threshold * max(floor, stack.reduced(chi2, COMPANION)))
            hot = _peaks(self.z[k], stack.grid.side, _HOT)
            peaks.append(hot[np.argsort(-self.z[k, hot], kind="stable")])
        self.first = np.concatenate([[0], np.cumsum([len(hot) for hot in peaks])])
        """(count + 1,): the peaks of map k are first[k] to first[k + 1]."""
        self.peak = np.concatenate(peaks)
        """Pixels of the peaks, the highest of each map first."""
        self.height = np.concatenate([z[hot] for z, hot in zip(self.z, peaks, strict=True)])
        """Heights of the peaks."""


def _recovered(stack: Stack, place: np.ndarray, noise: _Noise, tick) -> np.ndarray:
    """(count, P) smallest amplitudes."""
    grid, norm = stack.grid, stack.normalisation.astype(np.float32)
    found = np.empty((len(place), len(noise.claim)), dtype=np.float32)

    def judge(batch: np.ndarray) -> int:
        row, column = np.divmod(place[batch], grid.side)
        each = responses(stack, grid.axis[column], grid.axis[row]) * norm
        for k, rho in zip(batch, each.reshape(len(batch), -1), strict=True):
            top = rho[place[k]]
            if top > 0:
                rho /= top
                _critical(
                    rho, grid.side, place[k], noise.z, noise.claim, noise.peak, noise.height,
                    noise.first, found[k],
                )  # fmt: skip
            else:
                found[k] = np.inf
        return len(batch)

    batches = np.array_split(np.arange(len(place)), max(1, -(-len(place) // _BATCH)))
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        for done in pool.map(judge, batches):
            tick(done)
    return found.T


@compiled
def _critical(rho, side, place, z, claim, peak, height, first, found):
    """Smallest amplitudes at a place, of which `rho` is the response, in each of the maps `z`."""
    lobe = _lobe(rho, side, place)
    own = np.flatnonzero(lobe)
    sidelobes = _peaks(rho, side, LOBE)
    for k in range(len(claim)):
        a = np.inf  # at which a pixel of the lobe reaches the claim
        for q in own:
            a = min(a, (claim[k] - z[k, q]) / rho[q])
        a = max(0.0, a)
        for _ in range(_STEPS):  # the parabola adds a little to the highest pixel
            a = max(0.0, a + claim[k] - _own_height(a, rho, z[k], side, own))
        here = _own_height(a, rho, z[k], side, own)
        for q in sidelobes:
            if not lobe[q] and a * rho[q] + z[k, q] > here - _CLIMB:
                a, here = _above(a, here, rho, z[k], side, lobe, own, q)
        for n in range(first[k], first[k + 1]):
            q = peak[n]
            if a * rho[q] + height[n] > here - _CLIMB and not lobe[q]:
                a, here = _above(a, here, rho, z[k], side, lobe, own, q)
        found[k] = a


@compiled
def _above(a, here, rho, z, side, lobe, own, q):
    """The smallest amplitude, `a` or more, at which the lobe beats the pixel q, and its height."""
    if here > _rival_height(a, rho, z, side, lobe, q):
        return a, here
    low, high = a, a
    while high < _LARGEST:
        high += 1.0
        if _own_height(high, rho, z, side, own) > _rival_height(high, rho, z, side, lobe, q):
            break
        low = high
    for _ in range(_HALVINGS):
        a = (low + high) / 2
        if _own_height(a, rho, z, side, own) > _rival_height(a, rho, z, side, lobe, q):
            high = a
        else:
            low = a
    return high, _own_height(high, rho, z, side, own)


@compiled
def _own_height(a, rho, z, side, own):
    """Height of the highest peak of a rho + z on the pixels `own`."""
    best, top = -np.inf, own[0]
    for q in own:
        value = a * rho[q] + z[q]
        if value > best:
            best, top = value, q
    return _peak(a, rho, z, side, top)


@compiled
def _rival_height(a, rho, z, side, lobe, q):
    """Height of the peak off the lobe within a step of the pixel q, which is not at the edge.

    -inf where what is highest there is the flank of the lobe.
    """
    best, top = -np.inf, q
    for down in (-side, 0, side):
        for n in range(q + down - 1, q + down + 2):
            value = a * rho[n] + z[n]
            if value > best and not lobe[n]:
                best, top = value, n
    for down in (-side, 0, side):
        for n in range(max(top + down - 1, 0), min(top + down + 2, rho.size)):
            if lobe[n] and a * rho[n] + z[n] > best:
                return -np.inf
    return _peak(a, rho, z, side, top)


@compiled
def _peak(a, rho, z, side, q):
    """Height of a rho + z about the pixel q, by a parabola along either axis."""
    top = a * rho[q] + z[q]
    if not (0 < q % side < side - 1 and side <= q < rho.size - side):
        return top
    across = _vertex(top, a * rho[q - 1] + z[q - 1], a * rho[q + 1] + z[q + 1])
    before, after = a * rho[q - side] + z[q - side], a * rho[q + side] + z[q + side]
    return top + across + _vertex(top, before, after)


@compiled
def _vertex(top, before, after):
    """How much higher than `top` a parabola through it and its neighbours is."""
    curvature = 2 * top - before - after
    slope = abs(after - before)
    return slope * slope / (8 * curvature) if slope < 2 * curvature else 0.0


@compiled
def _lobe(rho, side, place):
    """Which pixels are joined by a rho above `LOBE` to a place, or to its twin."""
    lobe = np.zeros(rho.size, dtype=np.bool_)
    waiting = [place]
    waiting.extend(_peaks(rho, side, TWIN))
    for q in waiting:
        lobe[q] = True
    while len(waiting):
        q = waiting.pop()
        row, column = q // side, q % side
        for m in range(max(row - 1, 0), min(row + 2, side)):
            for n in range(max(column - 1, 0), min(column + 2, side)):
                if rho[m * side + n] > LOBE and not lobe[m * side + n]:
                    lobe[m * side + n] = True
                    waiting.append(m * side + n)
    return lobe


@compiled
def _peaks(field, side, least):
    """Pixels of the local maxima above `least` of a flattened map, but for its edge."""
    found = []
    for row in range(1, side - 1):
        for q in range(row * side + 1, row * side + side - 1):
            r = field[q]
            if (
                r > least
                and r > field[q - 1] and r >= field[q + 1]
                and r > field[q - side] and r >= field[q + side]
                and r > field[q - side - 1] and r >= field[q + side + 1]
                and r > field[q - side + 1] and r >= field[q + side - 1]
            ):  # fmt: skip
                found.append(q)
    return np.array(found, dtype=np.int64)
