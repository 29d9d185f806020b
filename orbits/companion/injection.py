"""Put a companion into data, or take one out: the observed noise stays.

V2 and amplitudes are multiplied by what the model says of the pair over what it says of the star
alone, with their errors; to phases the difference is added. Taking out what was put in gives the
data back.
"""

from dataclasses import dataclass, replace

import astropy.units as u
import numpy as np

from ..binary import Scene, companion_name, model
from ..observation import OBSERVABLES, Observation
from ..positions import offsets
from ..sampling import Sampling
from .fit import Fit

_LEAST = 1e-9
"""V2 or amplitude of a model below this is a null, and a ratio to it would know no bounds."""


@dataclass(frozen=True, kw_only=True)
class Companion:
    """A companion to put in or take out, and the star it belongs to; lengths in mas."""

    x: float
    """To the East."""
    y: float
    """To the North."""
    contrast: float
    diameter: float = 0.0
    primary_diameter: float = 0.0

    @classmethod
    def at(
        cls, separation: u.Quantity, position_angle: u.Quantity, contrast: float, **diameters: float
    ) -> "Companion":
        """By separation and position angle.

        Raises
        ------
        ValueError
            If the contrast is not between 0 and 1, the separation negative, or a length or the
            angle not finite.
        """
        if not 0 < contrast <= 1:
            raise ValueError(f"contrast must be above 0 and at most 1, got {contrast}")
        distance, angle = separation.to_value(u.mas), position_angle.to_value(u.deg)
        lengths = {"separation": distance, "position angle": angle, **diameters}
        for name, value in lengths.items():
            if not np.isfinite(value):
                raise ValueError(f"{name.replace('_', ' ')} must be a finite number, got {value}")
        if distance < 0:
            raise ValueError(f"separation must not be negative, got {separation}")
        x, y = offsets(distance, angle)
        return cls(x=float(x), y=float(y), contrast=contrast, **diameters)

    @property
    def without(self) -> "View":
        """The star alone."""
        scene = Scene(companions=0)
        return View(scene, scene.vector({"primary_diameter": self.primary_diameter}))

    @property
    def pair(self) -> "View":
        """The star with its companion."""
        return self.added_to(self.without)

    def added_to(self, scene: "View") -> "View":
        """`scene` with this companion in it too."""
        own = {name: getattr(self, name) for name in ("x", "y", "contrast", "diameter")}
        return scene.beside(**own)


@dataclass(frozen=True, eq=False)
class View:
    """A scene and the values of its parameters."""

    scene: Scene
    values: np.ndarray

    @classmethod
    def of(cls, fitted: Fit) -> "View":
        """What was fitted."""
        return cls(fitted.scene, fitted.values)

    def beside(self, **companion: float) -> "View":
        """The scene with one more companion, of the parameters given (`x`, `y`, `contrast` ...)."""
        scene = replace(self.scene, companions=self.scene.companions + 1)
        known = dict(zip(self.scene.names, self.values.tolist(), strict=True))
        own = {companion_name(name, self.scene.companions): v for name, v in companion.items()}
        return View(scene, scene.vector({**known, **own}))

    @property
    def reach(self) -> float:
        """Distance of the farthest companion, mas."""
        places = (
            [self.values[self.scene.names.index(companion_name(axis, i))] for axis in "xy"]
            for i in range(self.scene.companions)
        )
        return max((float(np.hypot(*place)) for place in places), default=0.0)


def inject(observation: Observation, companion: Companion, *, smearing: bool = True) -> Observation:
    """`observation` with a companion put in."""
    return exchange(observation, companion.without, companion.pair, smearing=smearing)


def remove(observation: Observation, companion: Companion, *, smearing: bool = True) -> Observation:
    """`observation` with a companion taken out: the inverse of `inject`."""
    return exchange(observation, companion.pair, companion.without, smearing=smearing)


def exchange(
    observation: Observation, old: View, new: View, *, smearing: bool = True
) -> Observation:
    """`observation` as if the scene `new` stood where `old` does."""
    sampling = Sampling.of(observation, radius=max(old.reach, new.reach), smearing=smearing)
    before, after = (model(view.scene, view.values, sampling)[0] for view in (old, new))
    changes, first = {}, 0
    for name in OBSERVABLES:
        table = getattr(observation, name)
        own = slice(first, first + len(table))
        first += len(table)
        if name in ("t3", "visphi"):
            phase = table.value + after[own] - before[own]
            changes[name] = replace(table, value=(phase + np.pi) % (2 * np.pi) - np.pi)
        else:
            factor = np.maximum(after[own], _LEAST) / np.maximum(before[own], _LEAST)
            changes[name] = replace(table, value=table.value * factor, error=table.error * factor)
    return replace(observation, **changes)
