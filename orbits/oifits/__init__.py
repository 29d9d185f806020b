"""OIFITS, the open exchange format of optical interferometry: reading, checking, writing."""

from ..problems import Problem, Severity
from .epochs import observations, read, read_epochs
from .joining import join
from .loading import load
from .model import T3, Array, Corr, Flux, Inspol, OIFile, Target, Vis, Vis2, Wavelength
from .observables import ErrorBars
from .selecting import Selection, select

__all__ = [
    "T3",
    "Array",
    "Corr",
    "ErrorBars",
    "Flux",
    "Inspol",
    "OIFile",
    "Problem",
    "Selection",
    "Severity",
    "Target",
    "Vis",
    "Vis2",
    "Wavelength",
    "join",
    "load",
    "observations",
    "read",
    "read_epochs",
    "select",
]
