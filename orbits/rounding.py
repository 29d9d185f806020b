"""Numbers with their errors as they are printed: two digits of the error, the value to match."""

import math


def rounded(value: float, *errors: float) -> tuple[str, ...]:
    """`value` and its `errors` as text, all to the place of the second digit of the smallest error.

    Errors that are 0, infinite or NaN count as unknown and come back as "". With no known error the
    value is given to eight significant digits at most; a value that is NaN comes back as "".
    """
    known = [error for error in errors if math.isfinite(error) and error > 0]
    if not math.isfinite(value):
        return ("",) * (1 + len(errors))
    if not known:
        return (f"{value:.8g}",) + ("",) * len(errors)
    places = max(_places(error) for error in known)
    texts = [_fixed(value, places)]
    for error in errors:
        texts.append(_fixed(error, places) if math.isfinite(error) and error > 0 else "")
    return tuple(texts)


def plain(value: float, error: float) -> str:
    """``12.340 ± 0.056``, or the value alone where its error is unknown."""
    number, uncertainty = rounded(value, error)
    return f"{number} ± {uncertainty}" if uncertainty else number


def latex(value: float, error: float) -> str:
    r"""``$12.340 \pm 0.056$``, the value alone, or ``\ldots`` where there is none."""
    number, uncertainty = rounded(value, error)
    if not number:
        return r"\ldots"
    mantissa, _, power = number.partition("e")
    if power:
        number = rf"{mantissa} \times 10^{{{int(power)}}}"
    return rf"${number} \pm {uncertainty}$" if uncertainty else f"${number}$"


def _places(error: float) -> int:
    """Decimal places of the second significant digit of `error`, after rounding to two digits."""
    return 1 - int(f"{error:.1e}".partition("e")[2])


def _fixed(number: float, places: int) -> str:
    text = f"{round(number, places):.{max(places, 0)}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.") else text
