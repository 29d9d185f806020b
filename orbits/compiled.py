"""Functions compiled by numba, kept on disk between runs where a folder allows it."""

from collections.abc import Callable

from numba import njit


def compiled(function: Callable) -> Callable:
    """Compile `function` (numba's nopython mode, strict IEEE arithmetic, no global lock).

    The compiled code is cached beside the source or in the user's cache folder. Where neither can
    be written, as in a read-only container, it is compiled anew in each process.
    """
    try:
        return njit(cache=True, nogil=True, error_model="numpy")(function)
    except RuntimeError:  # numba's way to say that no cache folder can be written
        return njit(cache=False, nogil=True, error_model="numpy")(function)
