"""The FITS checksum, against the arithmetic that defines it and against astropy."""

import numpy as np
from astropy.io import fits
from hypothesis import given
from hypothesis import strategies as st

from orbits.oifits.blocks import read_hdus
from orbits.oifits.checksum import ALL_ONES, encode, ones_sum, verify


@given(st.lists(st.integers(0, ALL_ONES), max_size=50))
def test_the_sum_is_that_of_ones_complement(words):
    """Adding 32-bit words with end-around carry is the sum modulo 2^32 - 1."""
    total = ones_sum(np.array(words, dtype=">u4").tobytes())
    assert 0 <= total <= ALL_ONES
    assert total % ALL_ONES == sum(words) % ALL_ONES


@given(st.integers(0, ALL_ONES))
def test_the_letters_cancel_the_sum(total):
    """Letters and digits only; stored as FITS stores them, they add up to the complement."""
    letters = encode(total)
    assert len(letters) == 16
    assert letters.isalnum()
    stored = letters[1:] + letters[0]  # the value of a card starts one byte before a word
    zeros = ones_sum(b"0" * 16)
    assert (ones_sum(stored.encode()) - zeros + total) % ALL_ONES == 0


def test_checksums_of_astropy_verify_and_damage_is_found(tmp_path, rng):
    path = tmp_path / "image.fits"
    hdu = fits.PrimaryHDU(rng.standard_normal((30, 40)))
    hdu.writeto(path, checksum=True)
    assert [verify(hdu) for hdu in read_hdus(path)] == [None]
    content = bytearray(path.read_bytes())
    content[-3000] ^= 1
    path.write_bytes(content)
    assert [verify(hdu) for hdu in read_hdus(path)] == ["DATASUM"]
    content[-3000] ^= 1
    content[400] ^= 1  # in the header
    path.write_bytes(content)
    assert [verify(hdu) for hdu in read_hdus(path)] == ["CHECKSUM"]
