"""Elements of an orbit, and what they say about places on the sky and velocities.

The orbit is that of the companion relative to the primary. The position angle of the node and the
argument of periastron follow the visual convention: `argument` belongs to the companion's relative
orbit, and the companion recedes as it passes the node. The primary's own orbit has the argument
that spectroscopists quote, `argument` + 180 deg. Positions alone cannot tell (node, argument) from
both of them + 180 deg.
"""

from dataclasses import dataclass, fields

import astropy.units as u
import numpy as np
from astropy.time import Time

from . import kepler
from .positions import position_angle


@dataclass(frozen=True, kw_only=True)
class Elements:
    """The seven elements of a relative orbit."""

    period: u.Quantity
    periastron: Time
    eccentricity: float
    semimajor_axis: u.Quantity
    """Of the relative orbit, as an angle."""
    inclination: u.Quantity
    """0 to 180 deg; below 90 deg the position angle grows with time."""
    node: u.Quantity
    """Position angle of the node where the companion recedes."""
    argument: u.Quantity
    """From the node to the companion's periastron, in the sense of motion."""

    def __post_init__(self) -> None:
        for name, unit in _UNITS.items():
            object.__setattr__(self, name, _quantity(name, getattr(self, name), unit))
        if not isinstance(self.periastron, Time):
            raise ValueError(f"periastron must be an astropy Time, got {self.periastron!r}")
        object.__setattr__(self, "eccentricity", float(self.eccentricity))
        if not 0 <= self.eccentricity < 1:
            raise ValueError(f"eccentricity must lie in [0, 1), got {self.eccentricity!r}")
        if not self.period > 0:
            raise ValueError(f"period must be positive, got {self.period}")
        if not self.semimajor_axis > 0:
            raise ValueError(f"semimajor_axis must be positive, got {self.semimajor_axis}")
        if not 0 <= self.inclination.to_value(u.deg) <= 180:
            raise ValueError(f"inclination must lie in 0 to 180 deg, got {self.inclination}")

    @property
    def thiele_innes(self) -> u.Quantity:
        """The constants A, B, F, G as one Quantity of four, in the unit of `semimajor_axis`."""
        angles = (
            getattr(self, name).to_value(u.rad) for name in ("inclination", "node", "argument")
        )
        return np.stack(thiele_innes(1.0, *angles)) * self.semimajor_axis

    @classmethod
    def from_thiele_innes(
        cls, constants: u.Quantity, *, period: u.Quantity, periastron: Time, eccentricity: float
    ) -> "Elements":
        """The elements with the constants A, B, F, G, the node being the one below 180 deg."""
        constants = u.Quantity(constants)
        a, inclination, node, argument = campbell(*constants.value)
        return cls(
            period=period,
            periastron=periastron,
            eccentricity=eccentricity,
            semimajor_axis=a * constants.unit,
            inclination=np.degrees(inclination) * u.deg,
            node=np.degrees(node) * u.deg,
            argument=np.degrees(argument) * u.deg,
        )

    def true_anomaly(self, times: Time) -> u.Quantity:
        """True anomaly at `times`, within half a turn of 0."""
        mean = kepler.mean_anomaly(_mjd(times), self.period.to_value(u.day), _mjd(self.periastron))
        return (
            kepler.true_anomaly(
                kepler.eccentric_anomaly(mean, self.eccentricity), self.eccentricity
            )
            * u.rad
        )

    def offsets(self, times: Time) -> tuple[u.Quantity, u.Quantity]:
        """East and North offset of the companion from the primary at `times`."""
        X, Y = kepler.orbital_plane(
            _mjd(times), self.period.to_value(u.day), _mjd(self.periastron), self.eccentricity
        )
        A, B, F, G = self.thiele_innes
        return B * X + G * Y, A * X + F * Y

    def position(self, times: Time) -> tuple[u.Quantity, u.Quantity]:
        """Separation and position angle (0 to 360 deg) of the companion at `times`."""
        x, y = self.offsets(times)
        return np.hypot(x, y), position_angle(x.value, y.value) * u.deg

    def velocities(
        self,
        times: Time,
        *,
        k1: u.Quantity | None = None,
        k2: u.Quantity | None = None,
        gamma: u.Quantity = 0 * u.km / u.s,
    ) -> tuple[u.Quantity | None, u.Quantity | None]:
        """Radial velocity of the primary and of the companion at `times`, positive receding.

        `k1` and `k2` are the semi-amplitudes, `gamma` the velocity of the centre of mass. A star
        without an amplitude has None for its velocity.
        """
        along = self.argument + self.true_anomaly(times)
        shape = np.cos(along) + self.eccentricity * np.cos(self.argument)
        return (
            None if k1 is None else gamma - k1 * shape,
            None if k2 is None else gamma + k2 * shape,
        )

    def with_other_node(self) -> "Elements":
        """The orbit with the same path on the sky and the opposite velocities."""
        values = {field.name: getattr(self, field.name) for field in fields(self)}
        for name in ("node", "argument"):
            values[name] = (values[name].to(u.deg) + 180 * u.deg) % (360 * u.deg)
        return Elements(**values)


_UNITS = {
    "period": u.day,
    "semimajor_axis": u.mas,
    "inclination": u.deg,
    "node": u.deg,
    "argument": u.deg,
}


def thiele_innes(a, inclination, node, argument):
    """The constants A, B, F, G of semimajor axis `a` and three angles in rad; arrays broadcast.

    North = A X + F Y and East = B X + G Y with X, Y the place in the orbital plane in units of the
    semimajor axis (Thiele 1883, Astron. Nachr. 104, 245; van den Bos 1926, Union Obs. Circ. 68).
    """
    c, s = np.cos(argument), np.sin(argument)
    cn, sn = np.cos(node), np.sin(node)
    ci = np.cos(inclination)
    return (
        a * (c * cn - s * sn * ci),
        a * (c * sn + s * cn * ci),
        a * (-s * cn - c * sn * ci),
        a * (-s * sn + c * cn * ci),
    )


def campbell(A, B, F, G):
    """Semimajor axis, inclination, node and argument (rad) of the constants; arrays broadcast.

    The inverse of `thiele_innes`, with 0 <= node < pi and 0 <= argument < 2 pi. The sum and the
    difference of node and argument are the phases of two complex numbers whose moduli are
    a (1 +- cos i): both stay well defined as i approaches 0, 90 or 180 deg.
    """
    plus = (A + G) + 1j * (B - F)  # a (1 + cos i) exp(i (argument + node))
    minus = (A - G) + 1j * (-B - F)  # a (1 - cos i) exp(i (argument - node))
    large, small = np.abs(plus), np.abs(minus)
    a = (large + small) / 2
    inclination = 2 * np.arctan2(np.sqrt(small), np.sqrt(large))
    node = ((np.angle(plus) - np.angle(minus)) / 2) % np.pi
    node = np.where(node >= np.pi, 0.0, node)  # -1e-17 % pi rounds up to pi
    argument = np.where(large >= small, np.angle(plus) - node, np.angle(minus) + node)
    return a, inclination, node[()], (argument % (2 * np.pi))[()]


def _quantity(name: str, value: object, unit: u.UnitBase) -> u.Quantity:
    try:
        quantity = u.Quantity(value)
        quantity.to(unit)
    except (TypeError, u.UnitConversionError) as error:
        raise ValueError(
            f"{name} must be a Quantity in {unit} or the like, got {value!r}"
        ) from error
    return quantity


def _mjd(times: Time) -> np.ndarray:
    """MJD in TDB, which the dynamics run on."""
    return times.tdb.mjd
