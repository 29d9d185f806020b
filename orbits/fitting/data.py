"""The data as the tables of numbers that the compiled likelihood reads."""

from dataclasses import dataclass

import numpy as np

from ..constants import JULIAN_YEAR
from ..positions import Positions
from ..system import Parallax
from ..velocities import Velocities
from .knowledge import NEED_PARALLAX, combined, rows_of
from .likelihood import BOUNDED, DERIVED, FREE, NO_PARALLAX, Tables
from .model import Model
from .priors import Priors
from .space import Space, make_space


@dataclass(frozen=True, eq=False, kw_only=True)
class Data:
    """Positions, velocities and parallax against one model, ready for the likelihood."""

    space: Space
    priors: Priors
    model: Model
    reference: float
    """MJD TDB of the middle of the data, from which times count."""
    positions: Positions | None
    velocities: Velocities | None
    """Sorted by time; `positions` likewise, with the rows of a night together."""
    parallax: Parallax | None
    tables: Tables
    design_names: tuple[str, ...]
    """What the columns of the design stand for."""
    design_scales: np.ndarray
    """(q,) the standard deviations of their priors."""
    design_means: np.ndarray
    """(q,) the means of their priors, which the tables have taken off the velocities."""

    @property
    def nuisances(self) -> dict[str, str]:
        """Name in the results of each further axis, by its name in the space."""
        labels = self.tables.place_labels
        names: dict[str, str] = {}
        for column, form in ((1, "position_jitter{}_mas"), (2, "scale{}"), (3, "angle{}_deg")):
            names |= _label(self.space, labels[:, column], self.positions, form)
        return names | _label(
            self.space, self.tables.speed_labels, self.velocities, "velocity_jitter{}_kms"
        )

    @property
    def fingerprint(self) -> tuple:
        """All that a fit depends on here."""
        return tuple(self.tables), self.priors, self.model, self.space.names, self.reference

    @property
    def nights(self) -> int:
        """Number of nights with a position."""
        return 0 if self.positions is None else int(self.tables.place_labels[-1, 0]) + 1


def make_data(
    positions: Positions | None,
    velocities: Velocities | None,
    parallax: Parallax | None,
    priors: Priors,
    model: Model,
) -> Data:
    """Arrange the data for `model`."""
    times = [table.mjd for table in (positions, velocities) if table is not None]
    reference = float(np.mean([np.concatenate(times).min(), np.concatenate(times).max()]))
    position_names = _instruments(positions)
    velocity_names = _instruments(velocities)
    stars = set() if velocities is None else set(velocities.star.tolist())
    parallax_term = _parallax_term(parallax, positions, stars, priors)
    space = make_space(
        priors,
        positions=positions is not None,
        k1=0 in stars or (1 in stars and 2 in stars),
        k2=1 in stars or 2 in stars,
        sum_alone=stars == {2},
        circular=model.circular,
        outliers=model.outliers and positions is not None,
        parallax=parallax_term[0] == FREE,
        position_jitters=len(position_names) if model.position_jitter else 0,
        velocity_jitters=len(velocity_names) if model.velocity_jitter else 0,
        scales=sum(name in model.scale for name in position_names),
        angles=sum(name in model.position_angle_zero for name in position_names),
    )
    positions, places, place_labels = _places(positions, reference, space, model, position_names)
    velocities, speeds, speed_labels = _speeds(velocities, reference, space, velocity_names)
    names, scales, design = _design(velocities, reference, priors, model, velocity_names)
    means, scales, constant = combined(names, scales, priors.normal)
    speeds[:, 1] -= design @ means
    return Data(
        space=space,
        priors=priors,
        model=model,
        reference=reference,
        positions=positions,
        velocities=velocities,
        parallax=parallax,
        tables=Tables(
            columns=space.columns,
            places=places,
            place_labels=place_labels,
            calibration=np.array([priors.scale, np.radians(priors.position_angle_zero)]),
            field_variance=float(np.mean(np.square(places[:, 1:3]))) if len(places) else 1.0,
            speeds=speeds,
            speed_labels=speed_labels,
            design=design * scales,
            parallax=parallax_term,
            knowledge=rows_of(priors.normal, reference),
            constant=constant,
        ),
        design_names=names,
        design_scales=scales,
        design_means=means,
    )


def _label(space, axes, table, form) -> dict[str, str]:
    """Names of axes after the instruments of the rows they serve, if there are several."""
    names = {}
    for axis in np.unique(axes[axes >= 0]):
        instrument = table.instrument[np.argmax(axes == axis)]
        several = len(set(table.instrument)) > 1
        names[space.names[axis]] = form.format(f"_{instrument}" if several else "")
    return names


def _instruments(table: Positions | Velocities | None) -> list[str]:
    """The instruments in the order of their first datum."""
    return [] if table is None else list(dict.fromkeys(table.instrument[np.argsort(table.mjd)]))


def _places(positions, reference, space, model, names):
    if positions is None:
        return None, np.empty((0, 7)), np.empty((0, 4), dtype=np.int64)
    first = {label: positions.mjd[positions.night == label].min() for label in set(positions.night)}
    order = sorted(
        range(len(positions)), key=lambda i: (first[positions.night[i]], positions.night[i], i)
    )
    positions = positions.select(np.array(order))
    nights = {label: i for i, label in enumerate(dict.fromkeys(positions.night))}
    with np.errstate(divide="ignore"):  # an alternative of weight 0 never counts
        log_weight = np.log(positions.weight)
    covariance = positions.covariance
    numbers = np.column_stack(
        [
            positions.mjd - reference,
            positions.xy,
            covariance[:, 0, 0],
            covariance[:, 0, 1],
            covariance[:, 1, 1],
            log_weight,
        ]
    )
    which = [names.index(name) for name in positions.instrument]
    scaled = [name for name in names if name in model.scale]
    turned = [name for name in names if name in model.position_angle_zero]
    labels = np.column_stack(
        [
            [nights[label] for label in positions.night],
            [_axis(space, f"log_position_jitter_{i}") for i in which],
            [_axis_of(space, "scale", scaled, name) for name in positions.instrument],
            [_axis_of(space, "angle", turned, name) for name in positions.instrument],
        ]
    )
    return positions, numbers, labels.astype(np.int64)


def _speeds(velocities, reference, space, names):
    if velocities is None:
        return None, np.empty((0, 5)), np.empty(0, dtype=np.int64)
    velocities = velocities.select(np.argsort(velocities.mjd, kind="stable"))
    # A difference is the companion's velocity less the primary's: (K1 + K2) times the shape.
    shares = np.array([[-1.0, 0.0], [0.0, 1.0], [1.0, 1.0]])[velocities.star]
    numbers = np.column_stack(
        [velocities.mjd - reference, velocities.velocity, velocities.error**2, shares]
    )
    labels = [
        _axis(space, f"log_velocity_jitter_{names.index(name)}") for name in velocities.instrument
    ]
    return velocities, numbers, np.array(labels, dtype=np.int64)


def _design(velocities, reference, priors, model, names):
    """Names, prior deviations and columns of what shifts the velocities; gamma comes first."""
    if velocities is None or (velocities.star == 2).all():
        n = 0 if velocities is None else len(velocities)
        return (), np.empty(0), np.empty((n, 0))
    absolute = (velocities.star != 2).astype(float)
    labels, scales, columns = ["gamma_kms"], [priors.systemic], [absolute]
    for name in names[1:]:
        labels.append(f"zero_point_{name}_kms")
        scales.append(priors.zero_point)
        columns.append(absolute * (velocities.instrument == name))
    if model.drift:
        labels.append("drift_kms_per_year")
        scales.append(priors.drift)
        columns.append(absolute * (velocities.mjd - reference) / JULIAN_YEAR)
    return tuple(labels), np.array(scales), np.column_stack(columns)


def _parallax_term(parallax, positions, stars, priors) -> np.ndarray:
    """How a measured parallax enters.

    With both velocity curves it meets the orbital one, with one of them it is bounded, without it
    meets no other datum; knowledge of a mass makes it an axis in the last two cases.
    """
    if parallax is None or positions is None:
        return np.array([NO_PARALLAX, 1.0, 1.0])
    if 2 in stars or len(stars) == 2:
        kind = DERIVED
    elif NEED_PARALLAX & priors.normal.keys():
        kind = FREE
    else:
        kind = BOUNDED if stars else NO_PARALLAX
    return np.array([kind, parallax.value, parallax.error])


def _axis(space: Space, name: str) -> int:
    return space.names.index(name) if name in space.names else -1


def _axis_of(space: Space, stem: str, known: list[str], name: str) -> int:
    return _axis(space, f"{stem}_{known.index(name)}") if name in known else -1
