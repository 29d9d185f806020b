"""FITS as a row of header and data units (HDUs), each read whole and checked for its size.

Only the container is handled here (FITS Standard 4.0; Pence et al. 2010, A&A 524, A42): headers
become `astropy.io.fits.Header`, data stay bytes. A size is believed only as far as the file goes.
"""

import gzip
import math
import os
import re
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from astropy.io import fits
from astropy.utils.exceptions import AstropyUserWarning

from ..errors import InputError

BLOCK = 2880
MAX_HEADER_BLOCKS = 2000  # 72 000 cards; a header without END must not swallow the whole file
MAX_HDUS = 20_000
PIECE = 2**26
"""Bytes that are decompressed at a time."""


@dataclass(frozen=True)
class HDU:
    """One header and data unit."""

    number: int
    """0 is the primary HDU."""
    header: fits.Header
    raw_header: bytes
    data: bytes
    """Without the padding to whole blocks."""

    @property
    def name(self) -> str:
        """EXTNAME, in upper case; "" without one."""
        return text(self.header, "EXTNAME").upper()

    @property
    def raw(self) -> bytes:
        """The bytes of the HDU as they stand in a file."""
        return self.raw_header + self.data + b"\0" * (-len(self.data) % BLOCK)


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


def text(header: fits.Header, keyword: str, default: str = "") -> str:
    """The value of `keyword` as text without padding; `default` where it is absent or garbled."""
    value = card(header, keyword)
    return default if value is None else str(value).strip()


def card(header: fits.Header, keyword: str) -> object | None:
    """The value of `keyword`; None where it is absent, undefined or garbled."""
    try:
        value = header.get(keyword)
    except (fits.VerifyError, ValueError, KeyError, TypeError):
        return None
    if isinstance(value, fits.card.Undefined):
        return None
    return _printable(value) if isinstance(value, str) else value


def cards(header: fits.Header) -> Iterator[tuple[str, object, str]]:
    """Keyword, value and comment of every card that is legible and has a value."""
    for entry in header.cards:
        try:
            name, value, comment = entry.keyword, entry.value, entry.comment
        except (fits.VerifyError, ValueError, KeyError, TypeError):
            continue
        if isinstance(value, fits.card.Undefined) or not re.fullmatch(r"[A-Z0-9_ -]+", name):
            continue
        if name in ("END", "CONTINUE", "HIERARCH"):  # parts of other cards, when all is well
            continue
        if len(name) > 8 or " " in name:
            name = f"HIERARCH {name}"  # the way to write longer names, in use at several places
        yield name, _printable(value) if isinstance(value, str) else value, _printable(comment)


def illegible(header: fits.Header) -> int:
    """How many cards cannot be read."""
    count = 0
    for entry in header.cards:
        try:
            count += not re.fullmatch(r"[A-Z0-9_ -]*", entry.keyword) or entry.value is None
        except (fits.VerifyError, ValueError, KeyError, TypeError):
            count += 1
    return count


def _printable(value: str) -> str:
    """`value` with a question mark for what FITS does not allow in a header."""
    return re.sub(r"[^ -~]", "?", value)


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


def _read(handle, size: int) -> bytes | None:
    """`size` bytes; None if there are fewer, found out without asking for memory beyond them."""
    if isinstance(handle, gzip.GzipFile):
        pieces, left = [], size
        while left:
            pieces.append(handle.read(min(left, PIECE)))
            if not pieces[-1]:
                return None
            left -= len(pieces[-1])
        return b"".join(pieces)
    if size > os.fstat(handle.fileno()).st_size - handle.tell():
        return None
    return handle.read(size)


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


def _parse(path: Path, raw: bytes, number: int) -> fits.Header:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", AstropyUserWarning)  # said by `illegible`
            return fits.Header.fromstring(raw.decode("ascii", errors="replace"))
    except (ValueError, fits.VerifyError, KeyError, TypeError) as error:
        raise InputError(f"{path}: the header of HDU {number} cannot be read: {error}") from error


def _data_size(path: Path, header: fits.Header, number: int) -> int:
    """Bytes of data that the header announces."""

    def whole(keyword: str, default: int | None = None) -> int:
        value = card(header, keyword)
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
