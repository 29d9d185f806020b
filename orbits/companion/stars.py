"""What the stars of an epoch may look like, and which of their parameters a search fits."""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import astropy.units as u
import numpy as np

from ..binary import PRIMARY, Scene, companion_name
from ..observation import OBSERVABLES, Observation


@dataclass(frozen=True, kw_only=True)
class Stars:
    """What the stars may look like, and which of their parameters are fitted.

    Parameters are named as in `orbits.binary.Scene`. The position and contrast of a companion are
    always fitted; everything else is fixed at 0 unless it is named here.
    """

    primary: str = "disc"
    """Shape; see `orbits.visibility.SHAPES`."""
    companion: str = "disc"
    fixed: Mapping[str, float] = field(default_factory=dict)
    free: tuple[str, ...] = ()
    priors: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    """Mean and standard deviation of the Gaussian prior of a parameter, which is then fitted."""
    may_resolve: bool = False
    """Fit the companion's diameter, within a prior where the data do not tell it from a point."""
    contrast_per_instrument: bool = False
    fibre_fwhm: float | None = None
    """mas; see `Scene`."""


def settled_stars(
    observation: Observation,
    stars: Stars,
    diameter: u.Quantity | None,
    companion_diameter: u.Quantity | None,
) -> Stars:
    """`stars` with the two diameters decided: fixed, or among the free parameters."""
    fixed, free = dict(stars.fixed), set(stars.free) | set(stars.priors)
    names = ("primary_diameter", "diameter")
    shapes = (stars.primary, stars.companion)
    sized = any(len(getattr(observation, name)) for name in ("v2", "t3amp", "visamp"))
    resolve = False
    for name, shape, value in zip(names, shapes, (diameter, companion_diameter), strict=True):
        if value is not None:
            fixed.setdefault(name, float(value.to_value(u.mas)))
        elif name == "diameter":
            resolve = shape != "point" and name not in (*fixed, *free)
        elif shape != "point" and name not in fixed and sized:
            free.add(name)
    twice = sorted(free & set(fixed))
    if twice:
        raise ValueError(f"parameter {', '.join(twice)} is both fixed and free")
    return replace(stars, fixed=fixed, free=tuple(sorted(free)), may_resolve=resolve)


def scene_of(observation: Observation, stars: Stars, companions: int) -> Scene:
    """The scene of `stars` with so many companions, contrasts stated at the median wavelength."""
    wavelengths = [getattr(observation, name).wavelength for name in OBSERVABLES]
    return Scene(
        primary_shape=stars.primary,
        companion_shape=stars.companion,
        companions=companions,
        instruments=len(observation.instruments) if stars.contrast_per_instrument else 1,
        reference=float(np.median(np.concatenate(wavelengths))),
        fibre_fwhm=stars.fibre_fwhm,
    )


def known_values(scene: Scene, stars: Stars) -> dict[str, float]:
    """Values fixed or expected beforehand, for all companions of `scene`."""
    given = {**{name: mean for name, (mean, _) in stars.priors.items()}, **stars.fixed}
    known = {}
    for name, value in given.items():
        for i in range(max(scene.companions, 1)):
            each = name if name in PRIMARY else companion_name(name, i)
            if each in scene.names:
                known[each] = value
    return known


def free_parameters(scene: Scene, stars: Stars) -> tuple[int, ...]:
    """Indices of the fitted parameters of `scene`."""
    wanted = {name for name in stars.free if name in PRIMARY}
    every = [name for name in stars.free if name not in PRIMARY]
    if stars.contrast_per_instrument:
        every += [f"ratio_{k}" for k in range(1, scene.instruments)]
    for i in range(scene.companions):
        wanted |= {companion_name(name, i) for name in ("x", "y", "contrast", *every)}
    unknown = sorted(wanted - set(scene.names))
    if unknown:
        raise ValueError(f"no parameter {', '.join(unknown)} to fit; there are {scene.names}")
    return tuple(i for i, name in enumerate(scene.names) if name in wanted)


def priors_of(scene: Scene, stars: Stars) -> dict[int, tuple[float, float]]:
    """Index of a parameter of `scene`: its prior; those of a companion hold for every one."""
    priors = {}
    for name, prior in stars.priors.items():
        for i in range(max(scene.companions, 1)):
            each = name if name in PRIMARY else companion_name(name, i)
            if each in scene.names:
                priors[scene.names.index(each)] = prior
    return priors
