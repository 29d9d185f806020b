"""Files that nobody here wrote, read as their authors meant them."""

import numpy as np
import pytest

from orbits import InputError, read
from orbits.oifits import load


def test_both_versions_of_capella_give_identical_numbers(outside):
    """The sample files of the standard's C library hold the same data in versions 1 and 2."""
    one, two = read(outside / "alp_aur-v1.fits"), read(outside / "alp_aur-v2.fits")
    assert (load(outside / "alp_aur-v1.fits").version, len(one.v2), len(one.t3)) == (1, 2, 1)
    for name in ("v2", "t3"):
        for field in ("legs", "wavelength", "bandwidth", "value", "error", "mjd", "stations"):
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
