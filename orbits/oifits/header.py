"""Headers: the cards of an HDU, read once, with those that cannot be read counted."""

import re
import warnings

from astropy.io import fits
from astropy.utils.exceptions import AstropyUserWarning


class Header:
    """What a FITS header says.

    Raises
    ------
    ValueError, KeyError, TypeError, astropy.io.fits.VerifyError
        If the bytes cannot be taken apart into cards.
    """

    cards: list[tuple[str, object, str]]
    """Keyword, value and comment of every card that is legible and has a value."""
    illegible: int
    """How many cards cannot be read."""

    def __init__(self, raw: bytes) -> None:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", AstropyUserWarning)  # said by `illegible`
            entries = fits.Header.fromstring(raw.decode("ascii", errors="replace")).cards
        self.cards, self.illegible = [], 0
        self._values: dict[str, object] = {}
        for entry in entries:
            try:
                self._add(entry.keyword, entry.value, entry.comment)
            except (fits.VerifyError, ValueError, KeyError, TypeError):
                self.illegible += 1

    def _add(self, name: str, value: object, comment: str) -> None:
        if not re.fullmatch(r"[A-Z0-9_ -]*", name):
            raise ValueError(f"illegal keyword {name!r}")
        if isinstance(value, str):
            value = _printable(value)
        nothing = value is None or isinstance(value, fits.card.Undefined)
        self._values.setdefault(name, None if nothing else value)
        # The names left out are parts of other cards, when all is well.
        if nothing or name in ("", "END", "CONTINUE", "HIERARCH"):
            return
        if len(name) > 8 or " " in name:
            name = f"HIERARCH {name}"  # the way to write longer names, in use at several places
        self.cards.append((name, value, _printable(comment)))

    def __contains__(self, keyword: str) -> bool:
        return keyword in self._values

    def get(self, keyword: str) -> object | None:
        """The value of `keyword`; None where it is absent, undefined or garbled."""
        return self._values.get(keyword)

    def text(self, keyword: str) -> str:
        """The value of `keyword` as text without padding; "" where there is none."""
        value = self.get(keyword)
        return "" if value is None else str(value).strip()


def _printable(value: str) -> str:
    """`value` with a question mark for what FITS does not allow in a header."""
    return re.sub(r"[^ -~]", "?", value)
