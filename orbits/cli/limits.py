"""nodeline limits: the faintest companion that a night, or several, would have shown."""

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from .frame import Force, Json, Seed, emit, say, warn
from .night import (
    Diameter,
    ErrorFloor,
    ErrorScale,
    FlipPhase,
    HalfField,
    IgnoreCorrelations,
    SharedBaselines,
    T3Calibration,
    Target,
    Use,
    V2Calibration,
    checked,
    error_model,
    length,
    numbers,
)

if TYPE_CHECKING:
    from ..companion.limit_result import Limits
    from ..observation import Observation
    from ..system import System

_SHOWN = 8
"""Separations in the table for people; the files have all of them."""
_ROUTES = """
  found blind: in {completeness:.0%} of noise realisations the search finds it at its place, above
    what noise reaches anywhere in the field with probability {false_alarm:g} (a gain
    in chi-square of {threshold:.1f})
  difference:  chi-square there grows too much for it, at {confidence:.2%}, the place being given
  total:       chi-square of all closure phases, taken as independent, is improbable at the same
    level, in the form of Absil et al. 2011 as we recall it, not checked against the paper's text;
    far weaker the more data there are, and wrong where they are correlated: to compare with
    papers"""


def limits(
    files: Annotated[
        list[Path],
        typer.Argument(help="OIFITS files, or one system file.", metavar="FILE...|SYSTEM.toml"),
    ],
    target: Target = None,
    night: Annotated[str | None, typer.Option(help="Date; else all nights together.")] = None,
    field: HalfField = None,
    diameter: Diameter = None,
    shared_baselines: SharedBaselines = False,
    v2_calibration: V2Calibration = 0.0,
    t3_calibration: T3Calibration = 0.0,
    ignore_correlations: IgnoreCorrelations = False,
    flip_phase: FlipPhase = False,
    use: Use = None,
    error_scale: ErrorScale = None,
    error_floor: ErrorFloor = None,
    confidence: Annotated[float, typer.Option(help="Of what chi-square excludes.")] = 0.9973,
    completeness: Annotated[float, typer.Option(help="Share of companions to be found.")] = 0.9,
    false_alarm: Annotated[float, typer.Option(help="Of what counts as found.")] = 0.01,
    positions: Annotated[int, typer.Option(min=9, help="Most along a side of the maps.")] = 65,
    injections: Annotated[int, typer.Option(min=20, help="Noise realisations a place.")] = 200,
    trials: Annotated[
        int, typer.Option(min=0, help="Full searches for companions put into the data, a night.")
    ] = 0,
    output: Annotated[
        Path | None, typer.Option(help="Folder for tables (ECSV) and a picture.")
    ] = None,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Say what a night excludes: the faintest companion, by separation, that it would have shown.

    A companion that it does show is fitted first. Several nights are taken together for a companion
    that does not move, and one by one.
    """
    import astropy.units as u
    import numpy as np

    from ..companion.limits import limits as find
    from ..files import refuse_existing
    from ..progress import Bar

    if not 0.5 < confidence < 1:
        raise typer.BadParameter(f"--confidence must be between 0.5 and 1, got {confidence}")
    for name, value in {"completeness": completeness, "false-alarm": false_alarm}.items():
        if not 0 < value < 1:
            raise typer.BadParameter(f"--{name} must be between 0 and 1, got {value}")
    system, observations = _given(
        files,
        night,
        target=target,
        flip_phase=flip_phase,
        use=use,
        error_scale=numbers(error_scale),
        error_floor=numbers(error_floor),
    )
    warn(observations[0].problems)
    if system is not None:
        field = system.field if field is None else field
        diameter = system.diameter if diameter is None else diameter
        shared_baselines = shared_baselines or system.shared_baselines
        v2_calibration = v2_calibration or system.v2_calibration
        t3_calibration = t3_calibration or system.t3_calibration
    paths = {} if output is None else _paths(output, several=len(observations) > 1)
    refuse_existing(*paths.values(), force=force)
    result = find(
        observations,
        field=length("--field", field),
        diameter=length("--diameter", diameter),
        errors=error_model(
            shared_baselines=shared_baselines,
            v2_calibration=v2_calibration,
            t3_calibration=t3_calibration,
            ignore_correlations=ignore_correlations,
        ),
        confidence=confidence,
        completeness=completeness,
        false_alarm=false_alarm,
        positions=positions,
        injections=injections,
        trials=trials,
        rng=np.random.default_rng(seed),
        progress=Bar(),
    )
    magnitude = None if system is None else system.magnitude
    parallax = None
    if system is not None and system.parallax is not None:
        parallax = system.parallax.value * u.mas
    say(describe(result), json=json)
    if paths:
        _write(result, paths, parallax, magnitude, force=force)
        say(f"  written    {', '.join(map(str, paths.values()))}", json=json)
    if json:
        told = {"primary_magnitude": magnitude}
        if parallax is not None:
            told["parallax_mas"] = parallax.value
        emit({**result.to_json(), **{k: v for k, v in told.items() if v is not None}})


def _given(
    files: list[Path],
    night: str | None,
    *,
    target: str | None,
    flip_phase: bool,
    use: list[str] | None,
    error_scale: dict[str, float],
    error_floor: dict[str, float],
) -> tuple["System | None", list["Observation"]]:
    """The nights asked for, and the system file if they come from one."""
    from ..measuring import observations
    from ..observation import DEFAULT
    from ..oifits import ErrorBars, read_epochs
    from ..oifits.epochs import one_night
    from ..system import read_system

    system = None
    if len(files) == 1 and files[0].suffix == ".toml":
        system = read_system(files[0])
        system = replace(
            system,
            target=system.target if target is None else target,
            flip_phase=flip_phase or system.flip_phase,
            use=use or system.use,
            error_scale={**system.error_scale, **error_scale},
            error_floor={**system.error_floor, **error_floor},
        )
        epochs = checked(observations, system)
    else:
        epochs = checked(
            read_epochs,
            files,
            target=target,
            flip_phase=flip_phase,
            observables=use or DEFAULT,
            errors=checked(ErrorBars.of, error_scale, error_floor),
        )
    return system, epochs if night is None else [one_night(epochs, night)]


def _paths(folder: Path, *, several: bool) -> dict[str, Path]:
    names = {
        "curve": "limits.ecsv", "map": "limits-map.ecsv", "completeness": "completeness.ecsv",
        "picture": "limits.png",
    }  # fmt: skip
    if several:
        names["nights"] = "limits-nights.ecsv"
    return {what: folder / name for what, name in names.items()}


def _write(result: "Limits", paths: dict[str, Path], parallax, magnitude, *, force: bool) -> None:
    from ..companion.limit_tables import completeness_table, curve_table, map_table, nights_table
    from ..files import whole_file
    from ..plots import style
    from ..plots.limits import draw_limits

    tables = {
        "curve": curve_table(result, parallax=parallax, magnitude=magnitude),
        "map": map_table(result),
        "completeness": completeness_table(result),
    }
    if "nights" in paths:
        tables["nights"] = nights_table(result)
    for what, table in tables.items():
        with whole_file(paths[what], force=force) as temporary:
            table.write(temporary, format="ascii.ecsv", overwrite=True)
    style.save(draw_limits(result, parallax=parallax), paths["picture"], force=force)


def describe(result: "Limits") -> str:
    """The limits in lines for people."""
    columns = result.curve()
    n = len(result.nights)
    lines = [f"{result.target}, {n} night{'s' if n > 1 else ''}, within {result.field:.4g} mas"]
    for (mjd, _), one in zip(result.nights, result.removed, strict=True):
        if one is not None:
            lines.append(
                f"  MJD {mjd:.4f} shows a companion at {one.separation_mas:.3f} mas, PA "
                f"{one.position_angle_deg:.2f} deg, contrast {one.contrast:.4g}; limits on another"
            )
    lines += [
        "                 faintest companion excluded, contrast (magnitudes): median / worst angle",
        "  separation     found blind                   difference                    total",
    ]
    rows = len(columns["separation"])
    for k in range(rows // _SHOWN, rows, -(-rows // _SHOWN)):
        cells = [
            " / ".join(_magnitudes(columns[f"{route}_{part}"][k]) for part in ("median", "worst"))
            for route in ("recovered", "profile", "published")
            if route in result.maps
        ]
        separation = columns["separation"][k]
        lines.append(f"  {separation:7.2f} mas   " + "  ".join(f"{c:<28}" for c in cells).rstrip())
    if result.each:
        lines.append("  each night, median over the field:")
        lines += [_night(one) for one in result.each]
    for one in result.each or (result,):
        if one.trials:
            found = sum(t.found for t in one.trials)
            lines.append(
                f"  MJD {one.nights[0][0]:.4f}: full searches found {found} of {len(one.trials)} "
                "companions of limiting contrast put into the data"
            )
    told = ("completeness", "false_alarm", "threshold", "confidence")
    return "\n".join(lines) + _ROUTES.format(**{name: getattr(result, name) for name in told})


def _night(one: "Limits") -> str:
    import numpy as np

    mjd, instrument = one.nights[0]
    routes = ("recovered", "profile", "published")
    cells = [_magnitudes(float(np.median(one.maps[r]))) for r in routes if r in one.maps]
    return f"  MJD {mjd:.4f}  " + "  ".join(f"{cell:<16}" for cell in cells) + f"  {instrument}"


def _magnitudes(contrast: float) -> str:
    """A contrast and the magnitudes that it means."""
    import math

    if not math.isfinite(contrast):
        return "none"
    if contrast == 0:
        return "0"  # any companion is excluded, however faint
    return f"{contrast:.2g} ({-2.5 * math.log10(contrast):.2f})"
