"""A companion found by squared visibilities and differential phases, from a file of its own.

The phases get a random piston and are reduced as instruments do it: a polynomial in wavelength is
taken out of each row, and every channel is referred to all others.
"""

import numpy as np
import pytest
from skies import four_stations, offset_in_sigma, with_all_observables

from orbits import InputError, read, search
from orbits.binary import Scene, model
from orbits.companion import covariance
from orbits.companion.covariance import Covariance
from orbits.oifits import Array, OIFile, Target, Vis, Vis2, Wavelength, load
from orbits.sampling import Sampling

TRUTH = {"x": -14.3, "y": 9.1, "contrast": 0.1, "primary_diameter": 1.2}
CHANNELS, V2_ERROR, PHASE_ERROR = 24, 0.02, 0.005


def reduced(phase, wave, order):
    """(rows, channels) phases, rad, without their polynomial and against all other channels."""
    fitted = np.polynomial.polynomial.polyfit(wave, phase.T, order)
    left = phase - np.polynomial.polynomial.polyval(wave, fitted)
    others = (left.sum(axis=1, keepdims=True) - left) / (left.shape[1] - 1)
    return left - others


def night(path, rng, order):
    blank = with_all_observables(four_stations(exposures=4, channels=CHANNELS))
    sampling = Sampling.of(blank, radius=30.0)
    data = model(Scene(), Scene().vector(TRUTH), sampling)[0]
    exposures, wave = blank.v2.exposures, blank.v2.channels.wavelength
    shape = len(exposures), CHANNELS
    v2, phase = data[: len(blank.v2)].reshape(shape), data[-len(blank.visphi) :].reshape(shape)
    piston = rng.uniform(-3, 3, (2, shape[0], 1))
    phase = phase + piston[0] + piston[1] * (wave.mean() / wave - 1)
    phase = phase + PHASE_ERROR * rng.standard_normal(shape)
    common = {
        "insname": "SIM", "arrname": "SIM", "date_obs": "2023-02-25",
        "target_id": np.ones(shape[0]),
        "mjd": exposures.mjd, "ucoord": exposures.legs[:, 0, 0], "vcoord": exposures.legs[:, 0, 1],
        "sta_index": exposures.stations + 1,
    }  # fmt: skip
    OIFile(
        target=Target(target_id=[1], target=["Invented"]),
        arrays=[Array(arrname="SIM", tel_name=list("ABCD"), sta_name=list("ABCD"),
                      sta_index=[1, 2, 3, 4])],
        wavelengths=[Wavelength(insname="SIM", eff_wave=wave)],
        data=[
            Vis2(**common, vis2data=v2 + V2_ERROR * rng.standard_normal(shape),
                 vis2err=np.full(shape, V2_ERROR)),
            Vis(**common, phityp="differential", phiorder=order,
                visphi=np.degrees(reduced(phase, wave, order)),
                # Beside a free mean, phases against all others are noisier by N / (N - 1).
                visphierr=np.full(shape, np.degrees(PHASE_ERROR) * CHANNELS / (CHANNELS - 1)),
                visrefmap=np.broadcast_to(~np.eye(CHANNELS, dtype=bool), (*shape, CHANNELS))),
        ],
    ).write(path)  # fmt: skip
    return path


@pytest.mark.parametrize("order", [0, 1, 2])
def test_a_companion_is_found_with_its_sign(tmp_path, rng, order):
    """The chi-square is that of the data less what is fitted, taken out or not measured."""
    seen = read(night(tmp_path / "night.fits", rng, order), observables=("v2", "visphi"))
    result = search(seen, noise_searches=0)
    best = result.best
    assert offset_in_sigma(best, TRUTH["x"], TRUTH["y"]) < 4
    taken = 2 + order
    assert best.dof == len(seen.v2) + len(seen.visphi) - taken * len(seen.visphi.exposures) - 4
    assert abs(best.chi2 - best.dof) < 4 * np.sqrt(2 * best.dof)
    # Squared visibilities alone do not tell a place from the opposite one.
    alone = search(read(tmp_path / "night.fits", observables=("v2",)), noise_searches=0)
    assert any(one.weight > 0.4 for one in alone.alternatives)
    assert all(one.weight < 1e-3 for one in result.alternatives)


def test_more_phases_than_memory_holds_are_refused(monkeypatch):
    blank = with_all_observables(four_stations(exposures=2, channels=3))
    monkeypatch.setattr(covariance, "_MOST_PISTONS", 1000)
    with pytest.raises(InputError, match=r"phases of 12 exposures among .* take a part"):
        Covariance.of(blank, Sampling.of(blank, radius=0.0))


@pytest.mark.parametrize("turns", [0.0, 0.6, 1.5, 4.0, -7.3])
def test_a_path_difference_of_any_length_changes_nothing(tmp_path, rng, turns):
    """Absolute phases with a slope of so many turns over the band, wrapped as files hold them."""
    differential = night(tmp_path / "night.fits", rng, 0)
    file = load(differential)
    phases = file.of(Vis)[0]
    wavenumber = 1 / file.wavelengths[0].eff_wave.astype(float)
    slope = 360 * turns * (wavenumber - wavenumber[0]) / np.ptp(wavenumber)
    phases.phityp, phases.visrefmap, phases.phiorder = "absolute", None, None
    phases.visphi = (phases.visphi * (CHANNELS - 1) / CHANNELS + slope + 180) % 360 - 180
    phases.visphierr = phases.visphierr * (CHANNELS - 1) / CHANNELS
    file.write(tmp_path / "absolute.fits")
    found = [
        search(read(path, observables=("v2", "visphi")), noise_searches=0).best
        for path in (differential, tmp_path / "absolute.fits")
    ]
    for name in ("x_mas", "y_mas", "contrast", "chi2"):
        one, other = (getattr(best, name) for best in found)
        # Only the wavelengths, stored in single precision, differ by rounding: a slope of seven
        # turns to 1e-7 is 5e-6 rad, a two-thousandth of the error of a phase.
        assert one == pytest.approx(other, rel=1e-5)
