"""What a fit tells besides its samples: solutions, nights, chi-square, and what stays unknown."""

import math

import numpy as np

from .data import Data
from .likelihood import (
    DERIVED,
    largest_parallax,
    night_probabilities,
    position_densities,
    velocity_shape,
)
from .proposal import Proposal
from .space import K1, K2, from_chart, to_chart
from .target import Target

SEPARATE = 4.0
"""Two densities whose centres lie this many of their standard deviations apart are two solutions,
unless others bridge the gap."""

VAGUE = 0.5
"""Standard deviation of ln of a quantity from which the data do no more than bound it."""


def solutions_of(target: Target, points: np.ndarray) -> np.ndarray:
    """(S,) number of the solution that each point belongs to, 0 the one with most points."""
    if len(target.proposal) == 0:
        return np.zeros(len(points), dtype=int)
    groups = _groups(target.data, target.proposal)
    share, _, _ = target.responsibilities(points)
    label = groups[np.argmax(share, axis=1)]
    counts = np.bincount(label, minlength=groups.max() + 1)
    rank = np.empty_like(counts)
    rank[np.argsort(-counts, kind="stable")] = np.arange(len(counts))
    return rank[label]


def _groups(data: Data, proposal: Proposal) -> np.ndarray:
    """(J,) label of each component: those that overlap, directly or by others, share it."""
    count = len(proposal.weight)
    label = np.arange(count)
    for j in range(count):
        for k in range(j):
            if _distance(data, proposal, j, k) < SEPARATE or (
                proposal.solution[j] == proposal.solution[k]
            ):
                label[label == label[j]] = label[k]
    return np.unique(label, return_inverse=True)[1]


def _distance(data: Data, proposal: Proposal, j: int, k: int) -> float:
    """Distance of two centres in units of the width of both along the line between them."""
    space = data.space
    point, there = np.empty(space.dimensions), np.empty(space.dimensions)
    from_chart(proposal.mean[k], proposal.chart[k], space.columns, point)
    to_chart(point, proposal.chart[j], space.columns, there)
    offset = there - proposal.mean[j]
    periodic = space.periodic(int(proposal.chart[j]))
    offset[periodic] -= 2 * np.pi * np.rint(offset[periodic] / (2 * np.pi))
    covariance = proposal.covariance[j]
    if proposal.chart[j] == proposal.chart[k]:
        covariance = covariance + proposal.covariance[k]
    return math.sqrt(max(float(offset @ np.linalg.solve(covariance, offset)), 0.0))


def nights(data: Data, points: np.ndarray) -> list[dict]:
    """The nights that the posterior has something to say about: alternatives and outliers."""
    if data.positions is None:
        return []
    labels = data.tables.place_labels[:, 0]
    chosen, outlier = np.empty(len(labels)), np.empty(data.nights)
    night_probabilities(points, data.tables, chosen, outlier)
    told = []
    for night in range(data.nights):
        rows = np.flatnonzero(labels == night)
        entry: dict = {
            "night": str(data.positions.night[rows[0]]),
            "mjd": float(data.positions.mjd[rows[0]]),
        }
        if len(rows) > 1:
            entry["alternatives"] = [
                {
                    "separation_mas": float(data.positions.separation[row]),
                    "position_angle_deg": float(data.positions.position_angle[row]),
                    "probability": float(chosen[row]),
                }
                for row in rows
            ]
        if data.model.outliers:
            entry["outlier_probability"] = float(outlier[night])
        if len(entry) > 2:
            told.append(entry)
    return told


def chi_square(data: Data, point: np.ndarray) -> dict:
    """Chi-square of one point by data set, with the stated errors, and the degrees of freedom.

    Of alternatives the best counts; nights that are outliers more likely than not do not count.
    Positions and velocities of several instruments are also told by instrument.
    """
    parts: dict[str, dict] = {}
    if data.positions is not None:
        square, rows = _positions(data, point)
        parts["positions"] = _set(square, 2, data.positions.instrument[rows])
    if data.velocities is not None:
        parts["velocities"] = _set(_velocities(data, point), 1, data.velocities.instrument)
    if data.tables.parallax[0] == DERIVED:
        found = largest_parallax(point, data.space.columns)
        square = ((found - data.parallax.value) / data.parallax.error) ** 2
        parts["parallax"] = {"chi2": float(square), "data": 1}
    count = sum(part["data"] for part in parts.values())
    free = sum(
        not n.startswith(("log_position", "log_velocity", "outlier", "parallax"))
        for n in data.space.names
    )
    return {
        "chi2": float(sum(part["chi2"] for part in parts.values())),
        "dof": count - free - len(data.design_names),
        "data": parts,
    }


def _set(square: np.ndarray, each: int, instrument: np.ndarray) -> dict:
    """Chi-square and number of data, `each` a row, of a data set and of its instruments."""

    def total(rows: np.ndarray) -> dict:
        return {"chi2": float(square[rows].sum()), "data": each * int(rows.sum())}

    made = total(np.ones(len(square), dtype=bool))
    names = sorted(set(instrument))
    if len(names) > 1:
        made["instruments"] = {str(name): total(instrument == name) for name in names}
    return made


def _positions(data: Data, point: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Chi-square (m,) of the nights that count, and the row of each that fits best."""
    labels = data.tables.place_labels[:, 0]
    inside, outside = np.empty(len(labels)), np.empty(len(labels))
    bare = data.tables._replace(
        place_labels=np.where(np.arange(4) == 1, -1, data.tables.place_labels)
    )
    position_densities(point, bare, inside, outside)
    cxx, cxy, cyy = data.tables.places[:, 3:6].T
    square = -2 * (inside - data.tables.places[:, 6]) - np.log(cxx * cyy - cxy**2)
    square -= 2 * math.log(2 * math.pi)
    nights = (np.flatnonzero(labels == night) for night in range(data.nights))
    best = np.array([rows[np.argmin(square[rows])] for rows in nights])
    if data.model.outliers:
        chosen, outlier = np.empty(len(labels)), np.empty(data.nights)
        night_probabilities(point[None], data.tables, chosen, outlier)
        best = best[outlier < 0.5]
    return square[best], best


def _velocities(data: Data, point: np.ndarray) -> np.ndarray:
    """Chi-square (n,) of the velocities at the zero points that suit them best."""
    tables = data.tables
    columns = tables.columns
    k1, k2 = (math.exp(point[columns[i]]) if columns[i] >= 0 else 0.0 for i in (K1, K2))
    shape = np.array([velocity_shape(point, columns, time) for time in tables.speeds[:, 0]])
    residual = tables.speeds[:, 1] - shape * (tables.speeds[:, 3] * k1 + tables.speeds[:, 4] * k2)
    error = np.sqrt(tables.speeds[:, 2])
    design = tables.design / error[:, None]
    deviates = np.linalg.solve(
        np.eye(design.shape[1]) + design.T @ design, design.T @ (residual / error)
    )
    return np.square(residual / error - design @ deviates)


def undetermined(data: Data, points: np.ndarray) -> list[str]:
    """Quantities that the data only bound: their posterior fills or touches the prior's range.

    On the scale where its prior is uniform from 0 to 1, a quantity counts as undetermined if its
    standard deviation exceeds 0.2 (that of the prior is 0.29), or if the samples come nearer to an
    end than a quarter of it (other than at e = 0 and at i = 0 or 180 deg). However wide the prior,
    so does a positive quantity whose logarithm is uncertain by more than VAGUE.
    """
    told = []
    space = data.space
    angles = {"longitude", "node", "h_x", "h_y"}
    for i, name in enumerate(space.names):
        if name in angles or space.normal[i]:
            continue
        part = (points[:, i] - space.low[i]) / (space.high[i] - space.low[i])
        ends = name not in ("cos_inclination", "outlier_fraction")
        vague = name.startswith("log_") and points[:, i].std() > VAGUE
        if part.std() > 0.2 or vague or (ends and _touches(part, low=True, high=True)):
            told.append(told_name(data, name))
    if "h_x" in space.names:
        i, j = space.names.index("h_x"), space.names.index("h_y")
        low, high = space.eccentricity
        part = (points[:, i] ** 2 + points[:, j] ** 2 - low) / (high - low)
        if part.std() > 0.2 or _touches(part, low=low > 0, high=True):
            told.append("eccentricity")
        phase = np.arctan2(points[:, j], points[:, i])
        longitude = points[:, space.names.index("longitude")]
        for name, angle in (("periastron_mjd", phase), ("argument_deg", longitude - phase)):
            # Without velocities the argument has two values half a turn apart: double it.
            factor = 1 if space.has_velocities or name == "periastron_mjd" else 2
            if abs(np.exp(1j * factor * angle).mean()) < 0.3:
                told.append(name)
    if "node" in space.names:
        factor = 1 if space.has_velocities else 2
        if abs(np.exp(1j * factor * points[:, space.names.index("node")]).mean()) < 0.3:
            told.append("node_deg")
    return told


def told_name(data: Data, name: str) -> str:
    """What results call a coordinate of the sampled space."""
    return _NAMES.get(name) or data.nuisances.get(name, name)


def _touches(part: np.ndarray, *, low: bool, high: bool) -> bool:
    """Whether samples reach an end of 0 to 1, measured by their spread."""
    near = 0.25 * part.std()
    return bool((low and part.min() < near) or (high and part.max() > 1 - near))


_NAMES = {
    "log_period": "period_d",
    "log_axis": "semimajor_axis_mas",
    "cos_inclination": "inclination_deg",
    "log_k1": "k1_kms",
    "log_k2": "k2_kms",
    "outlier_fraction": "outlier_fraction",
}


def notes(data: Data, *, confined: bool) -> list[str]:
    """Sentences that go with the result; `confined` tells that the proposal was not the prior."""
    said = []
    if not confined:
        said.append(
            "The data do not confine the orbit to compact solutions: "
            "all that the priors allow was searched."
        )
    if data.positions is not None and data.velocities is None:
        said.append(
            "Without velocities node and argument are known only up to half a turn of both; "
            "the node from 0 to 180 deg is given."
        )
    if data.model.circular:
        said.append("The orbit is circular: periastron stands for the passage of the node.")
    return said
