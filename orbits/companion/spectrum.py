"""The contrast spectrum of a companion: its contrast channel by channel, with the covariance.

All channels are fitted together with the exact model: one contrast for each, and what they share,
the diameters that the search fitted, with their priors, and, unless it is given, the place of the
companion. An error of these then shows up as covariance between channels.
"""

from dataclasses import dataclass, replace
from typing import Any

import astropy.units as u
import numpy as np

from ..binary import model
from ..errors import InputError, NothingFound
from ..observation import OBSERVABLES, Observable, Observation
from ..sampling import Sampling
from .covariance import Covariance, ErrorModel
from .fit import Fit, Problem, fit
from .result import Candidate

_UNKNOWN = 1e6
"""Variance of a contrast about which a channel says nothing."""


@dataclass(frozen=True, kw_only=True)
class Flatness:
    """How well one constant contrast explains a spectrum."""

    contrast: float
    """The constant that fits best."""
    chi2: float
    """Of the contrasts about it."""
    dof: int
    probability: float
    """Of a chi-square as large, if the contrast is constant."""


@dataclass(frozen=True, eq=False, kw_only=True)
class ContrastSpectrum:
    """Contrast in K bins of wavelength."""

    target: str
    instrument: np.ndarray
    """(K,) text."""
    wavelength: np.ndarray
    """(K,) mean of the data of each bin, m."""
    width: np.ndarray
    """(K,) from the shortest to the longest wavelength of a bin, channels whole, m."""
    contrast: np.ndarray
    """(K,); may be negative by its errors."""
    covariance: np.ndarray
    """(K, K), times `error_scale` squared."""
    error_scale: float
    """Root of the reduced chi-square where that exceeds 1."""
    x_mas: float
    y_mas: float
    place_fixed: bool
    """Whether the place was given, and not fitted with the contrasts."""
    primary_diameter_mas: float
    chi2: float
    dof: int

    @property
    def error(self) -> np.ndarray:
        """(K,) standard errors, for each bin by itself."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def flatness(self) -> Flatness | None:
        """The contrasts against one constant, by their covariance (generalised least squares).

        None where fewer than two channels say anything.
        """
        from scipy.stats import chi2 as law

        known = np.diag(self.covariance) < _UNKNOWN
        dof = int(known.sum()) - 1
        if dof < 1:
            return None
        contrast, covariance = self.contrast[known], self.covariance[np.ix_(known, known)]
        weights = np.linalg.solve(covariance, np.ones(dof + 1))
        constant = float(weights @ contrast / weights.sum())
        miss = contrast - constant
        chi2 = float(miss @ np.linalg.solve(covariance, miss))
        probability = float(law.sf(chi2, dof))
        return Flatness(contrast=constant, chi2=chi2, dof=dof, probability=probability)

    def to_json(self) -> dict[str, Any]:
        """One object of plain numbers and words."""
        return {
            "target": self.target,
            "x_mas": self.x_mas,
            "y_mas": self.y_mas,
            "place_fixed": self.place_fixed,
            "primary_diameter_mas": self.primary_diameter_mas,
            "chi2": self.chi2,
            "dof": self.dof,
            "error_scale": self.error_scale,
            "channels": [
                {"instrument": str(name), "wavelength_um": 1e6 * wave, "contrast": f, "error": e}
                for name, wave, f, e in zip(
                    self.instrument, self.wavelength.tolist(), self.contrast.tolist(),
                    self.error.tolist(), strict=True,
                )
            ],
            "covariance": self.covariance.tolist(),
        }  # fmt: skip

    def table(self):
        """One row for each bin; column `covariance` holds the rows of the matrix."""
        from astropy.table import Table

        with np.errstate(invalid="ignore", divide="ignore"):
            magnitude = -2.5 * np.log10(self.contrast)
        return Table(
            {
                "instrument": self.instrument.astype(str),
                "wavelength": self.wavelength * u.m,
                "width": self.width * u.m,
                "contrast": self.contrast,
                "contrast_error": self.error,
                "delta_mag": magnitude * u.mag,
                "covariance": self.covariance,
            },
            meta={"target": self.target, "x_mas": self.x_mas, "y_mas": self.y_mas,
                  "place_fixed": self.place_fixed, "error_scale": self.error_scale},
        )  # fmt: skip


def spectrum(
    observation: Observation,
    companion: Candidate,
    *,
    bins: int | None = None,
    fix_place: bool = False,
    errors: ErrorModel | None = None,
    smearing: bool = True,
) -> ContrastSpectrum:
    """Contrast per channel of a companion that was found.

    It is taken to stand still: one that moves, while it is observed, by several times the error of
    its place shifts single channels by about their errors.

    Parameters
    ----------
    companion : Candidate
        Where it is and what it looks like: the first of its scene.
    bins : int, optional
        Groups of adjoining channels for each instrument; by default every channel by itself.
    fix_place : bool
        Take the place for known; by default it is fitted too, and its error is in the covariance.

    Raises
    ------
    InputError
        If there are fewer channels than bins.
    NothingFound
        If no channel says anything about the companion.
    """
    if bins is not None and bins < 1:
        raise ValueError(f"bins must be at least 1, got {bins}")
    known = companion.fit
    if known.scene.companions != 1 or known.scene.instruments != 1:
        raise ValueError("the companion must be the only one, of one contrast")
    labelled, edges = _labelled(observation, bins)
    count = len(edges)
    # Bin k is "instrument" k + 1 of the scene, and its contrast 1 + ratio_(k + 1) times a common
    # one; there are no data of instrument 0.
    scene = replace(known.scene, instruments=count + 1)
    own = dict(zip(known.scene.names, known.values.tolist(), strict=True))
    slope, own["slope"] = own["slope"], 0.0
    level = max(own["contrast"], 1e-6)
    tilt = np.array([(wave / known.scene.reference) ** slope for wave, _, _ in edges])
    start = scene.vector({**own, "contrast": level})
    ratios = [scene.names.index(f"ratio_{k + 1}") for k in range(count)]
    start[ratios] = tilt - 1
    reach = 1.2 * companion.separation_mas
    sampling = Sampling.of(labelled, radius=reach, smearing=smearing)
    v2 = model(known.scene, known.values, sampling)[0][: len(observation.v2)]
    still = Sampling.of(observation, radius=0.0, smearing=smearing)
    problem = Problem.of(labelled, sampling, Covariance.of(observation, still, errors, v2))
    replaced = {"contrast", "slope", *(("x", "y") if fix_place else ())}

    def here(index: int) -> int:
        return scene.names.index(known.scene.names[index])

    shared = [here(i) for i in known.free if known.scene.names[i] not in replaced]
    squares = [here(i) for i in known.squares]
    fitted = (*shared, *squares)
    priors = {here(i): prior for i, prior in known.priors.items() if here(i) in fitted}
    found = fit(problem, scene, start, tuple(sorted((*shared, *ratios))), priors, squares=squares)
    return _result(observation, found, ratios, level, edges, fix_place)


def _result(observation, found: Fit, ratios, level, edges, fixed) -> ContrastSpectrum:
    places = [found.free.index(index) for index in ratios]
    scale2 = max(1.0, found.reduced)
    covariance = level**2 * scale2 * found.covariance[np.ix_(places, places)]
    if not (np.diag(covariance) < _UNKNOWN).any():
        raise NothingFound(f"{observation.target}: no channel says anything about the companion")
    return ContrastSpectrum(
        target=observation.target,
        instrument=np.array([name for _, _, name in edges], dtype=object),
        wavelength=np.array([wave for wave, _, _ in edges]),
        width=np.array([width for _, width, _ in edges]),
        contrast=level * (1 + found.values[ratios]),
        covariance=covariance,
        error_scale=float(np.sqrt(scale2)),
        x_mas=found.value("x"),
        y_mas=found.value("y"),
        place_fixed=fixed,
        primary_diameter_mas=abs(found.value("primary_diameter")),
        chi2=found.chi2,
        dof=found.dof,
    )


def _labelled(
    observation: Observation, bins: int | None
) -> tuple[Observation, list[tuple[float, float, str]]]:
    """The data with the number of their bin, from 1, as instrument; the bins' wavelengths."""
    tables = {name: getattr(observation, name) for name in OBSERVABLES}
    label = {name: np.zeros(len(table.channels), dtype=int) for name, table in tables.items()}
    edges: list[tuple[float, float, str]] = []
    for number, instrument in enumerate(observation.instruments):
        mine = {name: table.instrument == number for name, table in tables.items()}
        waves = _every(tables, mine, "wavelength")
        channels = np.unique(waves)
        if bins is not None and bins > channels.size:
            raise InputError(
                f"{observation.target}: {instrument} has {channels.size} channels, which cannot "
                f"be put into {bins} bins"
            )
        for group in np.array_split(channels, channels.size if bins is None else bins):
            for name, table in tables.items():
                here = table.channels.instrument == number
                here &= np.isin(table.channels.wavelength, group)
                label[name][here] = len(edges) + 1
            members = np.isin(waves, group)
            band = _every(tables, mine, "bandwidth")[members]
            width = (waves[members] + band / 2).max() - (waves[members] - band / 2).min()
            edges.append((float(waves[members].mean()), float(width), instrument))
    parts: dict[str, Observable] = {
        name: replace(table, channels=replace(table.channels, instrument=label[name]))
        for name, table in tables.items()
    }
    return replace(observation, **parts), edges


def _every(tables: dict[str, Observable], keep: dict[str, np.ndarray], name: str) -> np.ndarray:
    return np.concatenate([getattr(table, name)[keep[key]] for key, table in tables.items()])
