"""Files that nobody here wrote, read as their authors meant them."""

import numpy as np
import pytest
from astropy.io import fits

from orbits import InputError, read
from orbits.observation import OBSERVABLES
from orbits.oifits import load


def test_both_versions_of_capella_give_identical_numbers(outside):
    """The sample files of the standard's C library hold the same data in versions 1 and 2."""
    one, two = (read(outside / f"alp_aur-v{n}.fits", observables=OBSERVABLES) for n in (1, 2))
    assert load(outside / "alp_aur-v1.fits").version == 1
    sizes = {name: len(getattr(one, name)) for name in OBSERVABLES}
    assert sizes == {"v2": 2, "t3": 1, "t3amp": 1, "visamp": 1, "visphi": 1}
    with fits.open(outside / "alp_aur-v1.fits") as opened:
        pair, triangle = opened["OI_VIS"].data, opened["OI_T3"].data
        assert one.visamp.value.tolist() == pair["VISAMP"].tolist()
        assert np.degrees(one.visphi.value) == pytest.approx(pair["VISPHI"], rel=1e-15)
        assert one.t3amp.value.tolist() == triangle["T3AMP"].tolist()
    for name in OBSERVABLES:
        for field in (
            "legs", "wavelength", "bandwidth", "value", "error", "mjd", "integration", "stations",
        ):  # fmt: skip
            np.testing.assert_array_equal(
                getattr(getattr(one, name), field), getattr(getattr(two, name), field)
            )


def test_contest_binary_has_the_documented_size(outside):
    """Cotton et al. 2008: 6 telescopes, 8 channels, 75 x 8 V2 and 100 x 8 closure phases."""
    observation = read(outside / "contest-2008-binary.oifits")
    assert (len(observation.v2), len(observation.t3), len(observation.stations)) == (600, 800, 6)


def test_a_file_that_is_not_fits_is_refused(tmp_path):
    path = tmp_path / "notes.fits"
    path.write_text("no stars here")
    with pytest.raises(InputError, match="not a FITS file"):
        read(path)
