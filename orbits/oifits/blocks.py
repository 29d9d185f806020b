"""FITS as a row of header and data units (HDUs), each read whole and checked for its size.

Only the container is handled here (FITS Standard 4.0; Pence et al. 2010, A&A 524, A42): headers
become a `Header`, data stay bytes. A size is believed only as far as the file goes.
"""

import gzip
import math
import mmap
import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from astropy.io import fits

from ..errors import InputError
from .header import Header

BLOCK = 2880
MAX_HEADER_BLOCKS = 2000  # 72 000 cards; a header without END must not swallow the whole file
MAX_HDUS = 20_000
PIECE = 2**26
"""Bytes that are decompressed at a time."""
LARGE = 2**20
"""Bytes of data from which on they are mapped into memory instead of copied there."""


@dataclass(frozen=True)
class HDU:
    """One header and data unit."""

    number: int
    """0 is the primary HDU."""
    header: Header
    raw_header: bytes
    data: bytes | memoryview
    """Without the padding to whole blocks."""

    @property
    def name(self) -> str:
        """EXTNAME, in upper case; "" without one."""
        return self.header.text("EXTNAME").upper()

    @property
    def label(self) -> str:
        """How messages call it; "" for the primary HDU, which stands for the whole file."""
        return f"{self.name} (HDU {self.number})" if self.number else ""

    @property
    def raw(self) -> bytes:
        """The bytes of the HDU as they stand in a file."""
        return self.raw_header + bytes(self.data) + b"\0" * (-len(self.data) % BLOCK)


def read_hdus(path: Path) -> Iterator[HDU]:
    """Yield the HDUs of a FITS file, plain or compressed with gzip, one by one.

    Raises
    ------
    InputError
        If the file cannot be opened, is not FITS, is cut short, or contradicts itself.
    """
    try:
        with open(path, "rb") as plain:
            compressed = plain.read(2) == b"\x1f\x8b"
            plain.seek(0)
            if compressed:
                with gzip.open(plain) as handle:
                    yield from _hdus(path, handle)
            else:
                yield from _hdus(path, plain)
    except FileNotFoundError:
        raise InputError(f"{path}: no such file") from None
    except (OSError, EOFError, gzip.zlib.error) as error:
        raise InputError(f"{path}: cannot be read: {error}") from error


def _hdus(path: Path, handle) -> Iterator[HDU]:
    for number in range(MAX_HDUS):
        raw = _read_header(path, handle, number)
        if raw is None:
            return
        header = _parse(path, raw, number)
        size = _data_size(path, header, number)
        data = _read(handle, size)
        if data is None:
            raise InputError(
                f"{path}: cut short in HDU {number}, whose header announces {size} bytes of data; "
                "get a fresh copy"
            )
        handle.read(-size % BLOCK)
        yield HDU(number, header, raw, data)
    raise InputError(f"{path}: more than {MAX_HDUS} HDUs")


def _read(handle, size: int) -> bytes | memoryview | None:
    """`size` bytes; None if there are fewer, found out without asking for memory beyond them."""
    if isinstance(handle, gzip.GzipFile):
        pieces, left = [], size
        while left:
            pieces.append(handle.read(min(left, PIECE)))
            if not pieces[-1]:
                return None
            left -= len(pieces[-1])
        return b"".join(pieces)
    start = handle.tell()
    if size > os.fstat(handle.fileno()).st_size - start:
        return None
    if size < LARGE:
        return handle.read(size)
    before = start % mmap.ALLOCATIONGRANULARITY  # a map starts at a whole page
    pages = mmap.mmap(
        handle.fileno(), before + size, offset=start - before, access=mmap.ACCESS_READ
    )
    handle.seek(start + size)
    return memoryview(pages)[before:]


def _read_header(path: Path, handle, number: int) -> bytes | None:
    """The bytes of the next header; None at the end of the file."""
    blocks: list[bytes] = []
    while len(blocks) < MAX_HEADER_BLOCKS:
        block = handle.read(BLOCK)
        if not blocks:
            if number == 0 and not block.startswith(b"SIMPLE  ="):
                raise InputError(f"{path}: not a FITS file")
            if number > 0 and not block.startswith(b"XTENSION"):
                return None  # the standard allows anything after the last HDU, to be ignored
        if len(block) < BLOCK:
            raise InputError(f"{path}: cut short in the header of HDU {number}; get a fresh copy")
        blocks.append(block)
        if any(block[i : i + 8] == b"END     " for i in range(0, BLOCK, 80)):
            return b"".join(blocks)
    raise InputError(f"{path}: the header of HDU {number} has no END")


def _parse(path: Path, raw: bytes, number: int) -> Header:
    try:
        return Header(raw)
    except (ValueError, fits.VerifyError, KeyError, TypeError) as error:
        raise InputError(f"{path}: the header of HDU {number} cannot be read: {error}") from error


def _data_size(path: Path, header: Header, number: int) -> int:
    """Bytes of data that the header announces."""

    def whole(keyword: str, default: int | None = None) -> int:
        value = header.get(keyword)
        if value is None and default is not None and keyword not in header:
            return default
        if isinstance(value, bool) or not isinstance(value, int) or value < 0:
            if keyword == "BITPIX" and value in (-32, -64):
                return -value
            raise InputError(f"{path}: HDU {number}: keyword {keyword} is {value!r}, not a size")
        return value

    axes = whole("NAXIS")
    if axes > 999:
        raise InputError(f"{path}: HDU {number}: keyword NAXIS is {axes}, more than FITS allows")
    if axes == 0:
        return 0
    elements = math.prod(whole(f"NAXIS{axis}") for axis in range(1, axes + 1))
    return whole("BITPIX") // 8 * whole("GCOUNT", 1) * (whole("PCOUNT", 0) + elements)
