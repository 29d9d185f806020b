"""The model of a close binary: what an interferometer sees of a star and its companions.

    V(u, v) = [V_p + sum_i f_i V_i exp(-2 pi i (u x_i + v y_i))] / [1 + b + sum_i f_i]

with V_p and V_i the visibilities of the shapes, f_i the flux ratios and b the flux (in units of the
primary's) of a background so wide that no baseline sees it.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .constants import MAS
from .observation import Observation
from .sampling import Sampling
from .visibility import darkening_derivative, shape_visibility

PRIMARY = ("primary_diameter", "primary_darkening", "background")
COMPANION = ("x", "y", "contrast", "slope", "diameter", "darkening")


@dataclass(frozen=True, kw_only=True)
class Scene:
    """A primary at the origin, companions, and a background; which shapes, not how large.

    Parameters of a scene (lengths in mas, `x` to the East and `y` to the North):
    `primary_diameter`, `primary_darkening`, `background`, and for each companion `x`, `y`,
    `contrast` (flux over that of the primary, at `reference`), `slope` (power of the wavelength
    that the contrast follows), `diameter`, `darkening`, and `ratio_k` for each further instrument
    (its contrast is that of instrument 0 times 1 + ratio). From the second companion on the names
    end in its number: `x_2`.

    The visibility of a companion is 1 less what its diameter takes off; a negative diameter adds as
    much. No star looks so, but a fit to noise does: the square of a diameter that is too small to
    be seen comes out negative as often as not, and only such a fit is right on average.
    """

    primary_shape: str = "disc"
    companion_shape: str = "disc"
    companions: int = 1
    instruments: int = 1
    reference: float = 1e-6
    """m; the wavelength at which `contrast` is stated."""
    fibre_fwhm: float | None = None
    """mas; full width at half maximum of a Gaussian field of view centred on the primary."""

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Names of all parameters, in the order of a vector of values."""
        own = (*COMPANION, *(f"ratio_{k}" for k in range(1, self.instruments)))
        return PRIMARY + tuple(
            companion_name(name, i) for i in range(self.companions) for name in own
        )

    def vector(self, values: Mapping[str, float]) -> np.ndarray:
        """`values` in the order of `names`; what is not mentioned is 0.

        Raises
        ------
        ValueError
            If a name is not a parameter of this scene.
        """
        unknown = sorted(set(values) - set(self.names))
        if unknown:
            raise ValueError(f"no parameter {', '.join(unknown)}; there are {self.names}")
        return np.array([values.get(name, 0.0) for name in self.names], dtype=float)

    def visibility(
        self, values: np.ndarray, sampling: Sampling, free: Sequence[int] = ()
    ) -> tuple[np.ndarray, np.ndarray]:
        """Complex visibility at each sample and time node, averaged over its channel.

        Parameters
        ----------
        values : ndarray of shape (len(names),)
        sampling : Sampling
            m samples with T time nodes.
        free : sequence of int
            Indices of the p parameters to differentiate by.

        Returns
        -------
        visibility : complex ndarray of shape (m, T)
        derivative : complex ndarray of shape (p, m, T)
        """
        light = _Light(self, values, sampling, set(free))
        band = sampling.band_weights
        total = light.total @ band
        seen = (light.coherent @ band) / total
        derivative = np.zeros((len(free), *seen.shape), dtype=complex)
        for row, index in enumerate(free):
            if index in light.coherent_by:
                derivative[row] += (light.coherent_by[index] @ band) / total
            if index in light.total_by:
                derivative[row] -= seen * (light.total_by[index] @ band) / total
        return seen, derivative


class _Light:
    """Coherent and total flux at every node, (m, T, K), and their derivatives by parameter."""

    def __init__(self, scene: Scene, values: np.ndarray, sampling: Sampling, free: set[int]):
        self.scene, self.values, self.sampling, self.free = scene, values, sampling, free
        self.coherent_by: dict[int, np.ndarray] = {}
        self.total_by: dict[int, np.ndarray] = {}
        primary, by_diameter, by_darkening = self._shape(
            scene.primary_shape, values[0], values[1], wanted=bool({0, 1} & free)
        )
        self.coherent = primary.astype(complex)
        self.total = np.full(primary.shape, 1.0 + values[2])
        self._note(0, by_diameter, None)
        self._note(1, by_darkening, None)
        self._note(2, None, np.ones_like(self.total))
        size = len(COMPANION) + scene.instruments - 1
        for i in range(scene.companions):
            self._add(len(PRIMARY) + i * size)

    def _add(self, start: int) -> None:
        """Add the companion whose parameters begin at index `start`."""
        x, y, contrast, slope, diameter, darkening = self.values[start : start + len(COMPANION)]
        tilt, by_ratio = self._spectrum(slope, start + len(COMPANION))
        seen, by_x, by_y = self._attenuation(x, y)
        s = self.sampling
        shape, by_diameter, by_darkening = self._shape(
            self.scene.companion_shape,
            abs(diameter),
            darkening,
            wanted=bool({start + 4, start + 5} & self.free),
        )
        if diameter < 0:
            shape, by_darkening = 2 - shape, -by_darkening
        turn = np.exp((-2j * np.pi * MAS) * (s.u * x + s.v * y))
        beam = tilt * seen  # flux per unit of contrast
        wave = shape * turn
        self.coherent += contrast * beam * wave
        self.total = self.total + contrast * beam
        flux = contrast * beam
        phase = -2j * np.pi * MAS * flux * wave
        dim_x, dim_y = contrast * tilt * by_x, contrast * tilt * by_y
        self._note(start, phase * s.u + dim_x * wave, dim_x)
        self._note(start + 1, phase * s.v + dim_y * wave, dim_y)
        self._note(start + 2, beam * wave, beam)
        logarithm = flux * np.log(s.wavelength / self.scene.reference)
        self._note(start + 3, logarithm * wave, logarithm)
        self._note(start + 4, flux * by_diameter * turn, None)
        self._note(start + 5, flux * by_darkening * turn, None)
        for k, change in by_ratio.items():
            self._note(k, contrast * change * seen * wave, contrast * change * seen)

    def _shape(
        self, shape: str, diameter: float, darkening: float, *, wanted: bool
    ) -> tuple[np.ndarray, ...]:
        """Visibility of a shape, and if `wanted` its slopes by diameter (mas) and darkening."""
        if diameter == 0 and not wanted:
            return np.ones(self.sampling.u.shape), 0.0, 0.0
        scale = np.pi * MAS * self.sampling.modulus
        value, slope = shape_visibility(shape, scale * diameter, darkening)
        return value, slope * scale, darkening_derivative(shape, scale * diameter, darkening)

    def _spectrum(self, slope: float, first: int) -> tuple[np.ndarray, dict[int, np.ndarray]]:
        """Contrast relative to its stated value, per node, and its derivatives by the ratios."""
        s, scene = self.sampling, self.scene
        tilt = (s.wavelength / scene.reference) ** slope
        by_ratio = {}
        for k in range(1, scene.instruments):
            mine = (s.instrument == k)[:, None, None]
            by_ratio[first + k - 1] = tilt * mine
        for index in by_ratio:
            tilt = tilt + self.values[index] * by_ratio[index]
        return tilt, by_ratio

    def _attenuation(self, x: float, y: float) -> tuple[float, float, float]:
        """What the field of view lets through at an offset, and its derivatives."""
        if self.scene.fibre_fwhm is None:
            return 1.0, 0.0, 0.0
        steep = 4 * np.log(2) / self.scene.fibre_fwhm**2
        seen = float(np.exp(-steep * (x * x + y * y)))
        return seen, -2 * steep * x * seen, -2 * steep * y * seen

    def _note(self, index: int, coherent: np.ndarray | None, total: np.ndarray | None) -> None:
        if index in self.free:
            shape = self.coherent.shape
            if coherent is not None:
                self.coherent_by[index] = np.broadcast_to(coherent, shape)
            if total is not None:
                self.total_by[index] = np.broadcast_to(total, shape)


def companion_name(name: str, companion: int) -> str:
    """Name of a parameter of the companion with index `companion` (0 for the first)."""
    return name if companion == 0 else f"{name}_{companion + 1}"


def bispectrum(visibility: np.ndarray, sampling: Sampling) -> np.ndarray:
    """Bispectra V(A->B) V(B->C) conj V(A->C) of the closure phases, averaged over time.

    `visibility` has the shape (m, T) of the samples; the result (n_t3,).
    """
    return sides(visibility, sampling.t3, sampling.turned).prod(axis=1) @ sampling.time_weights


def sides(visibility: np.ndarray, samples: np.ndarray, turned: np.ndarray) -> np.ndarray:
    """(..., n, 3, T) visibilities (..., m, T) of the sides of triangles as they enter a product.

    `samples` (n, 3) are their samples; those `turned` (n, 3) enter conjugated.
    """
    chosen = visibility[..., samples, :]
    return np.where(turned[:, :, None], np.conj(chosen), chosen)


def model(
    scene: Scene, values: np.ndarray, sampling: Sampling, free: Sequence[int] = ()
) -> tuple[np.ndarray, np.ndarray]:
    """All data of a scene, stacked in the order of `observation.OBSERVABLES`, and their Jacobian.

    Returns
    -------
    data : ndarray of shape (n,)
        Squared visibilities, closure phases (rad), triple amplitudes, visibility amplitudes and
        phases (rad, about the primary's place).
    jacobian : ndarray of shape (n, len(free))
        Derivatives by the parameters whose indices are `free`.
    """
    seen, by = scene.visibility(values, sampling, free)
    weights = sampling.time_weights
    own, own_by = seen[sampling.v2], by[:, sampling.v2]
    v2 = (np.abs(own) ** 2) @ weights
    v2_by = 2 * (np.conj(own) * own_by).real @ weights
    triple, triple_by = _triple(seen, by, sampling.t3, sampling.turned, weights)
    t3, t3_by = _phase(triple, triple_by)
    product, product_by = _triple(seen, by, sampling.t3amp, sampling.t3amp_turned, weights)
    t3amp, t3amp_by = _modulus(product, product_by)
    visamp, visamp_by = _modulus(seen[sampling.visamp], by[:, sampling.visamp])
    visphi, visphi_by = _phase(seen[sampling.visphi] @ weights, by[:, sampling.visphi] @ weights)
    sense = np.where(sampling.visphi_turned, -1.0, 1.0)
    return (
        np.concatenate([v2, t3, t3amp, visamp @ weights, sense * visphi]),
        np.concatenate([v2_by, t3_by, t3amp_by, visamp_by @ weights, sense * visphi_by], axis=1).T,
    )


def _triple(seen, by, samples, turned, weights) -> tuple[np.ndarray, np.ndarray]:
    """(n,) products of the sides of triangles, averaged over time, and derivatives (p, n)."""
    a, b, c = np.moveaxis(sides(seen, samples, turned), 1, 0)
    a_by, b_by, c_by = np.moveaxis(sides(by, samples, turned), 2, 0)
    return (a * b * c) @ weights, (a_by * b * c + a * b_by * c + a * b * c_by) @ weights


def _phase(value: np.ndarray, by: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Phase of complex `value` and its derivatives, Im(dz / z); at an exact null it has none."""
    power = np.abs(value) ** 2
    return np.angle(value), (np.conj(value) * by).imag / np.where(power > 0, power, 1.0)


def _modulus(value: np.ndarray, by: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Modulus of complex `value` and its derivatives; at an exact null it has none."""
    size = np.abs(value)
    return size, (np.conj(value) * by).real / np.where(size > 0, size, 1.0)


def predict(
    observation: Observation, scene: Scene | None = None, *, smearing: bool = True, **values: float
) -> tuple[np.ndarray, np.ndarray]:
    """What `scene` (a binary of two discs by default) shows where `observation` looked.

    `values` are the parameters of the scene, see `Scene`; those left out are 0.

    Returns
    -------
    v2 : ndarray of shape (len(observation.v2),)
    t3 : ndarray of shape (len(observation.t3),)
        Closure phases, rad.
    """
    scene = Scene() if scene is None else scene
    vector = scene.vector(values)
    offsets = (
        np.hypot(values.get(companion_name("x", i), 0), values.get(companion_name("y", i), 0))
        for i in range(scene.companions)
    )
    reach = max(*offsets, abs(values.get("primary_diameter", 0)), 0)
    sampling = Sampling.of(observation, radius=reach, smearing=smearing)
    data, _ = model(scene, vector, sampling)
    n2, n3 = len(observation.v2), len(observation.t3)
    return data[:n2], data[n2 : n2 + n3]
