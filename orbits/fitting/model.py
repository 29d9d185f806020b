"""Which model is held against the data: the hypotheses that can be compared."""

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True)
class Model:
    """A Keplerian orbit, and what else is allowed to explain the data."""

    circular: bool = False
    """The eccentricity is 0."""
    drift: bool = False
    """The systemic velocity drifts linearly, as a distant third body makes it."""
    position_jitter: bool = False
    """Positions scatter more than their errors say; one extra error for each instrument."""
    velocity_jitter: bool = False
    """The same for velocities."""
    outliers: bool = False
    """Some nights have nothing to do with the orbit (Hogg, Bovy & Lang 2010, arXiv 1008.4686)."""
    scale: tuple[str, ...] = ()
    """Instruments of positions whose scale is uncertain."""
    position_angle_zero: tuple[str, ...] = ()
    """Instruments of positions whose orientation is uncertain."""
