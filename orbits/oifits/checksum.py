"""The FITS checksum keywords (FITS Standard 4.0, appendix J; Seaman, Pence & Rots 2012).

The data of an HDU, and the whole HDU, are summed as 32-bit numbers in ones' complement. DATASUM is
the sum of the data in decimal; CHECKSUM is chosen such that the whole HDU sums to -0.
"""

import numpy as np

from .blocks import HDU

ALL_ONES = 0xFFFFFFFF


def ones_sum(data: bytes | np.ndarray, start: int = 0) -> int:
    """Ones' complement sum of big-endian 32-bit words, continued from `start`."""
    data = np.frombuffer(data, dtype=np.uint8)
    whole = data.size // 4 * 4
    # Words of 32 bits: 2^32 of them fit into 64 bits, far more than a file has.
    total = start + int(data[:whole].view(">u4").sum(dtype=np.uint64))
    tail = bytes(data[whole:])
    total += int.from_bytes(tail.ljust(4, b"\0"), "big")
    while total > ALL_ONES:
        total = (total & ALL_ONES) + (total >> 32)
    return total


def encode(total: int) -> str:
    """The 16 letters that, stored as the value of CHECKSUM, cancel a sum of `total`.

    Each byte of the complement is spread over four letters; pairs are moved in opposite
    directions until none of them is punctuation.
    """
    value = ALL_ONES - total
    letters = np.zeros((4, 4), dtype=int)
    for place in range(4):
        byte = value >> (24 - 8 * place) & 0xFF
        quarter, rest = divmod(byte, 4)
        quad = np.full(4, quarter + ord("0"))
        quad[0] += rest
        while any(chr(letter) in ":;<=>?@[\\]^_`" for letter in quad):
            for first in (0, 2):
                if any(chr(letter) in ":;<=>?@[\\]^_`" for letter in quad[first : first + 2]):
                    quad[first] += 1
                    quad[first + 1] -= 1
        letters[:, place] = quad
    flat = letters.ravel()
    return "".join(chr(letter) for letter in np.roll(flat, 1))


def verify(hdu: HDU) -> str | None:
    """Which checksum keyword of an HDU is contradicted by its bytes; None if none is."""
    stated, sealed = hdu.header.text("DATASUM"), hdu.header.text("CHECKSUM")
    # The standard allows CHECKSUM to be left as zeros or blanks, meaning not computed.
    if not stated and not sealed.strip("0"):
        return None
    data = ones_sum(hdu.data)
    if stated and not (stated.isdigit() and int(stated) % ALL_ONES == data % ALL_ONES):
        return "DATASUM"
    if sealed.strip("0"):
        total = ones_sum(hdu.raw_header, data)
        if total not in (0, ALL_ONES):
            return "CHECKSUM"
    return None
