"""Nodeline: from calibrated OIFITS nights to companions, orbits and stellar masses."""

from importlib import import_module

_HOMES = {
    "Bundle": ".bundle",
    "Candidate": ".companion.result",
    "Catalogue": ".catalogue",
    "Elements": ".elements",
    "ErrorBars": ".oifits",
    "Entry": ".catalogue",
    "ErrorModel": ".companion.covariance",
    "InputError": ".errors",
    "Model": ".fitting.model",
    "Limits": ".companion.limit_result",
    "NodelineError": ".errors",
    "NothingFound": ".errors",
    "Observable": ".observation",
    "Observation": ".observation",
    "Parallax": ".system",
    "Positions": ".positions",
    "Priors": ".fitting.priors",
    "SearchResult": ".companion.result",
    "Selection": ".oifits",
    "Solution": ".fitting.solution",
    "Stars": ".companion.stars",
    "System": ".system",
    "Velocities": ".velocities",
    "add_entries": ".catalogue",
    "events": ".ephemeris",
    "find_entry": ".catalogue",
    "fit": ".fitting.engine",
    "predict": ".ephemeris",
    "limits": ".companion.limits",
    "posterior": ".companion.posterior",
    "read": ".oifits",
    "read_epochs": ".oifits",
    "read_positions": ".positions",
    "read_system": ".system",
    "read_velocities": ".velocities",
    "search": ".companion.search",
    "spectrum": ".companion.spectrum",
    "write_positions": ".positions",
    "write_velocities": ".velocities",
}

__all__ = sorted(_HOMES)


def __getattr__(name: str) -> object:
    """Import a public name when it is first asked for, so that `import orbits` stays quick."""
    if name not in _HOMES:
        raise AttributeError(f"module 'orbits' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name], __name__), name)


def __dir__() -> list[str]:
    return __all__
