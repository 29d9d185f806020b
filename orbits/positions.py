"""Positions: where the companion was seen, night by night, with error ellipse and alternatives."""

from dataclasses import dataclass
from pathlib import Path

import astropy.units as u
import numpy as np
from astropy.table import Table

from .constants import JULIAN_YEAR, MAS
from .errors import InputError
from .files import whole_file
from .rows import Rows
from .tables import Column, read_table, require, require_finite
from .times import YEAR_KINDS, tdb_of_utc, tdb_of_year, utc_of_tdb

COLUMNS = (
    Column("mjd", u.day),
    Column("year"),
    Column("separation", u.mas),
    Column("position_angle", u.deg),
    Column("east", u.mas),
    Column("north", u.mas),
    Column("error_east", u.mas),
    Column("error_north", u.mas),
    Column("correlation"),
    Column("error_major", u.mas),
    Column("error_minor", u.mas),
    Column("error_angle", u.deg),
    Column("separation_error", u.mas),
    Column("position_angle_error", u.deg),
    Column("contrast"),
    Column("contrast_error"),
    Column("weight"),
    Column("instrument", text=True),
    Column("night", text=True),
    Column("source", text=True),
)


@dataclass(frozen=True, eq=False, kw_only=True)
class Positions(Rows):
    """n relative positions, companion minus primary. Rows of one night exclude each other."""

    mjd: np.ndarray
    """(n,) TDB."""
    xy: np.ndarray
    """(n, 2) East and North offset, mas."""
    covariance: np.ndarray
    """(n, 2, 2) of `xy`, mas2."""
    weight: np.ndarray
    """(n,) prior probability of each row among those of its night; sums to 1 over a night."""
    night: np.ndarray
    """(n,) text: rows with the same label are alternatives of each other."""
    instrument: np.ndarray
    """(n,) text."""
    source: np.ndarray
    """(n,) text: where the row came from."""
    contrast: np.ndarray
    """(n,) flux of the companion over flux of the primary; NaN where not measured."""
    contrast_error: np.ndarray
    """(n,)"""

    @property
    def separation(self) -> np.ndarray:
        """(n,) mas."""
        return np.hypot(self.xy[:, 0], self.xy[:, 1])

    @property
    def position_angle(self) -> np.ndarray:
        """(n,) deg from North through East, 0 <= PA < 360."""
        return position_angle(self.xy[:, 0], self.xy[:, 1])

    @property
    def polar_errors(self) -> tuple[np.ndarray, np.ndarray]:
        """(n,) errors of separation, mas, and position angle, deg, to first order.

        Beyond half a turn the angle is unknown: its error is at most 180.
        """
        radial = self.xy / self.separation[:, None]
        across = np.stack([radial[:, 1], -radial[:, 0]], axis=-1)
        along, sideways = (
            np.sqrt(np.einsum("ni,nij,nj->n", unit, self.covariance, unit))
            for unit in (radial, across)
        )
        return along, np.minimum(np.degrees(sideways / self.separation), 180.0)


def position_angle(x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Angle of (x east, y north) from North through East, deg in [0, 360)."""
    angle = np.degrees(np.arctan2(x, y)) % 360.0
    return np.where(angle == 360.0, 0.0, angle)  # -1e-15 % 360 rounds up to 360


def offsets(separation: np.ndarray, position_angle: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """East and North offset of a separation at a position angle in degrees."""
    angle = np.radians(position_angle)
    return separation * np.sin(angle), separation * np.cos(angle)


def ellipse_covariance(major: np.ndarray, minor: np.ndarray, angle: np.ndarray) -> np.ndarray:
    """(..., 2, 2) covariance of (x, y) for semi-axes and the position angle (deg) of the major one.

    The semi-axes are one-sigma errors along their directions.
    """
    t = np.radians(np.asarray(angle, dtype=float))
    along = np.stack([np.sin(t), np.cos(t)], axis=-1)
    across = np.stack([np.cos(t), -np.sin(t)], axis=-1)
    return (
        np.square(major)[..., None, None] * along[..., :, None] * along[..., None, :]
        + np.square(minor)[..., None, None] * across[..., :, None] * across[..., None, :]
    )


def error_ellipse(covariance: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Semi-axes (major, minor) and position angle of the major one, deg in [0, 180).

    The inverse of `ellipse_covariance`, for `covariance` of shape (..., 2, 2).
    """
    values, vectors = np.linalg.eigh(covariance)
    major, minor = np.sqrt(values[..., 1]), np.sqrt(np.maximum(values[..., 0], 0.0))
    angle = np.degrees(np.arctan2(vectors[..., 0, 1], vectors[..., 1, 1])) % 180.0
    return major, minor, angle


def read_positions(path: Path) -> Positions:
    """Read a table of positions (ECSV, or CSV with units in the column names).

    Times are MJD UTC, or years with ``year_kind`` ("besselian" or "julian") in the table's
    metadata; they are returned as TDB. Places are `separation` and `position_angle`, or the
    offsets `east` and `north`. `error_major`, `error_minor`, `error_angle`, or `separation_error`,
    `position_angle_error`, or `error_east`, `error_north` and perhaps their `correlation` give the
    error ellipse. Position angles that count from the North of another equinox than J2000 are
    brought to it if the metadata hold `equinox` ("date", or a Julian year) and the star's `ra` and
    `dec` (ICRS, deg); with `pm_ra` (its proper motion in right ascension times cos dec, mas per
    year) the turn of the meridian by the star's own motion since J2000 is taken off as well.

    Raises
    ------
    InputError
        If a column is missing, unknown, without unit, or holds a value that cannot be used.
    """
    path = Path(path)
    table = read_table(path, COLUMNS)
    n = len(table)
    mjd = _times(path, table)
    xy, covariance = _places(path, table)
    xy, covariance = _turned(xy, covariance, _equinox_turn(path, table, mjd))
    return Positions(
        mjd=mjd,
        xy=xy,
        covariance=covariance,
        **_alternatives(path, table, n),
        instrument=_text(table, "instrument", n),
        source=_text(table, "source", n),
        contrast=_numbers(table, "contrast", n),
        contrast_error=_numbers(table, "contrast_error", n),
    )


def write_positions(path: Path, positions: Positions, *, force: bool = False) -> None:
    """Write `positions` as ECSV with units, readable by `read_positions`."""
    major, minor, angle = error_ellipse(positions.covariance)
    table = Table(
        {
            "mjd": utc_of_tdb(positions.mjd) * u.day,
            "separation": positions.separation * u.mas,
            "position_angle": positions.position_angle * u.deg,
            "error_major": major * u.mas,
            "error_minor": minor * u.mas,
            "error_angle": angle * u.deg,
            "contrast": positions.contrast,
            "contrast_error": positions.contrast_error,
            "weight": positions.weight,
            "instrument": positions.instrument.astype(str),
            "night": positions.night.astype(str),
            "source": positions.source.astype(str),
        }
    )
    with whole_file(path, force=force) as temporary:
        table.write(temporary, format="ascii.ecsv", overwrite=True)


def _times(path: Path, table: Table) -> np.ndarray:
    if "mjd" in table.colnames:
        require_finite(path, table, "mjd")
        return tdb_of_utc(table["mjd"])
    require(path, table, "year")
    require_finite(path, table, "year")
    kind = table.meta.get("year_kind")
    if kind not in YEAR_KINDS:
        raise InputError(
            f"{path}: column year needs 'year_kind' in the table's metadata: "
            f"besselian or julian, got {kind!r}"
        )
    return tdb_of_year(table["year"], kind)


def _places(path: Path, table: Table) -> tuple[np.ndarray, np.ndarray]:
    """Offsets (n, 2) and their covariance (n, 2, 2), as the table has them."""
    if "east" in table.colnames or "north" in table.colnames:
        require(path, table, "east", "north")
        require_finite(path, table, "east", "north")
        x, y = np.asarray(table["east"]), np.asarray(table["north"])
    else:
        require(path, table, "separation", "position_angle")
        require_finite(path, table, "separation", "position_angle")
        x, y = offsets(np.asarray(table["separation"]), np.asarray(table["position_angle"]))
    if "error_east" not in table.colnames:
        return np.stack([x, y], axis=-1), _covariance(path, table)
    require(path, table, "error_north")
    require_finite(path, table, "error_east", "error_north", positive=True)
    errors = np.stack([table["error_east"], table["error_north"]], axis=-1)
    correlation = _numbers(table, "correlation", len(table))
    correlation[np.isnan(correlation)] = 0.0
    if not (np.abs(correlation) < 1).all():
        row = int(np.argmax(np.abs(correlation) >= 1))
        raise InputError(
            f"{path}: row {row + 1}, column correlation: {correlation[row]} is not within -1 to 1"
        )
    covariance = errors[:, :, None] * errors[:, None, :]
    covariance[:, 0, 1] *= correlation
    covariance[:, 1, 0] *= correlation
    return np.stack([x, y], axis=-1), covariance


def _equinox_turn(path: Path, table: Table, mjd: np.ndarray) -> np.ndarray:
    """(n,) deg to add to the position angles to have them of J2000."""
    equinox = table.meta.get("equinox", 2000.0)
    if equinox == 2000.0 and "pm_ra" not in table.meta:
        return np.zeros(len(table))
    years = 2000.0 + (mjd - 51544.5) / JULIAN_YEAR
    try:
        ra, dec = float(table.meta["ra"]), float(table.meta["dec"])
        motion = float(table.meta.get("pm_ra", 0.0))
        of = years if equinox == "date" else np.full(len(table), float(equinox))
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(
            f"{path}: an equinox other than 2000 needs 'equinox' (date, or a Julian year), 'ra' "
            f"and 'dec' (deg) in the table's metadata; {error} is missing or not a number"
        ) from error
    from .precession import turn

    # The star's motion turns its meridian by d(alpha) sin(delta) (e.g. Heintz 1978, Double Stars).
    own = motion * MAS * np.degrees(np.tan(np.radians(dec))) * (2000.0 - years)
    return own - turn(ra, dec, 2000.0, of)


def _turned(xy: np.ndarray, covariance: np.ndarray, angle: np.ndarray):
    """Offsets and covariances with `angle` (deg) added to their position angles."""
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    rotation = np.stack([np.stack([c, s], -1), np.stack([-s, c], -1)], -2)
    return (
        np.einsum("nij,nj->ni", rotation, xy),
        rotation @ covariance @ np.swapaxes(rotation, 1, 2),
    )


def _covariance(path: Path, table: Table) -> np.ndarray:
    if "error_major" in table.colnames:
        names = ("error_major", "error_minor", "error_angle")
        require(path, table, *names)
        require_finite(path, table, "error_major", "error_minor", positive=True)
        require_finite(path, table, "error_angle")
        return ellipse_covariance(*(np.asarray(table[name]) for name in names))
    require(path, table, "separation_error", "position_angle_error")
    require_finite(path, table, "separation_error", "position_angle_error", positive=True)
    require(path, table, "separation", "position_angle")
    # One axis of the ellipse points along the position angle, the other across it.
    separation = np.asarray(table["separation"])
    across = separation * np.radians(np.asarray(table["position_angle_error"]))
    if not (across > 0).all():
        row = int(np.argmin(across > 0))
        raise InputError(
            f"{path}: row {row + 1}: a separation of 0 has no error in position angle; "
            "give error_major, error_minor and error_angle"
        )
    return ellipse_covariance(
        np.asarray(table["separation_error"]), across, np.asarray(table["position_angle"])
    )


def _alternatives(path: Path, table: Table, n: int) -> dict[str, np.ndarray]:
    """Night labels (each row its own night where none is given) and normalised weights."""
    given = _text(table, "night", n)
    night = np.array(
        [label or f"{path.name} row {row + 1}" for row, label in enumerate(given)], dtype=object
    )
    weight = _numbers(table, "weight", n)
    weight[np.isnan(weight)] = 1.0
    if (weight < 0).any():
        row = int(np.argmax(weight < 0))
        raise InputError(f"{path}: row {row + 1}, column weight: {weight[row]} is negative")
    _, which = np.unique(night.astype(str), return_inverse=True)
    total = np.bincount(which, weights=weight)
    if (total <= 0).any():
        label = night[np.argmax(total[which] <= 0)]
        raise InputError(f"{path}: the weights of night {label!r} are all 0")
    return {"night": night, "weight": weight / total[which]}


def _text(table: Table, name: str, n: int) -> np.ndarray:
    return np.asarray(table[name]) if name in table.colnames else np.full(n, "", dtype=object)


def _numbers(table: Table, name: str, n: int) -> np.ndarray:
    return np.array(table[name]) if name in table.colnames else np.full(n, np.nan)
