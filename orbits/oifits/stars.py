"""Stars: which targets of one name are one star, by where they stand in the sky."""

import math
from dataclasses import dataclass
from typing import Self

from .model import Target

SAME_PLACE = 1 / 60
"""Nearer than this, deg, targets of one name are one star: an arcminute, for coordinates are
rounded and stars move."""
SAME_EQUINOX = 1.0
"""Positions of equinoxes less than this apart, yr, can be compared: in that time, precession
shifts them by 50 arcsec."""


@dataclass(frozen=True)
class Place:
    """Where a star stands, deg, at an equinox, yr."""

    ra: float
    dec: float
    equinox: float

    @property
    def known(self) -> bool:
        """Whether it can be a position: 0, 0 and NaN stand for unknown ones."""
        return abs(self.ra) <= 360 and abs(self.dec) <= 90 and (self.ra != 0 or self.dec != 0)

    def away(self, other: Self) -> float | None:
        """Degrees from here to `other`; None where one is unknown or the equinoxes differ."""
        comparable = self.known and other.known
        if not comparable or not abs(self.equinox - other.equinox) < SAME_EQUINOX:
            return None
        a, b = math.radians(self.dec), math.radians(other.dec)
        half = math.sin(math.radians(other.ra - self.ra) / 2)
        square = math.sin((b - a) / 2) ** 2 + math.cos(a) * math.cos(b) * half**2
        return math.degrees(2 * math.asin(min(1.0, math.sqrt(square))))


def places(table: Target) -> list[Place]:
    """Where each target of a table stands."""
    columns = (table.raep0, table.decep0, table.equinox)
    return [Place(*row) for row in zip(*(column.tolist() for column in columns), strict=True)]


class Stars:
    """Gives names to stars so that no two share one.

    Names that differ in case or blanks only are the same. A star whose name belongs to another
    one gets a number after it.
    """

    def __init__(self) -> None:
        self._places: dict[str, Place] = {}

    def name(self, wanted: str, place: Place) -> tuple[str, float]:
        """The name of the star called `wanted`, and its distance, deg, from who has that name.

        The distance is 0 for all that keep their name.
        """
        name, number, away = wanted, 1, 0.0
        while (distance := self._distance(name, place)) >= SAME_PLACE:
            number, away = number + 1, away or distance
            name = f"{wanted}_{number}"
        known = self._places.get(plain(name))
        if known is None or not known.known:
            self._places[plain(name)] = place
        return name, away

    def _distance(self, name: str, place: Place) -> float:
        """Degrees from the star that has that name; 0 if there is none, or no telling."""
        known = self._places.get(plain(name))
        return 0.0 if known is None else known.away(place) or 0.0


def plain(name: str) -> str:
    """A name for comparison: without regard to case and repeated blanks."""
    return " ".join(name.split()).casefold()
