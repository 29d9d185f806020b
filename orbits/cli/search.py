"""nodeline search: is there a companion in this epoch, where, how bright, how sure."""

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ..errors import NothingFound
from ..files import refuse_existing
from .frame import Force, Json, Seed, emit, say
from .night import (
    Baselines,
    CompanionDiameter,
    Diameter,
    ErrorFloor,
    ErrorScale,
    FlipPhase,
    HalfField,
    IgnoreCorrelations,
    Instrument,
    NightDate,
    NightFiles,
    SharedBaselines,
    Station,
    T3Calibration,
    Target,
    Use,
    V2Calibration,
    Wavelengths,
    checked,
    error_model,
    length,
    named,
    read_night,
    selection,
)

if TYPE_CHECKING:
    from ..companion.result import Candidate, SearchResult

SHAPES = "point, disc, linear, power, gaussian or ring."
MOST_SHOWN = 8
"""Alternatives in the words for people."""
CLAIM = 0.01
"""Largest false-alarm probability of a claim, unless told otherwise."""


def search(
    files: NightFiles,
    target: Target = None,
    night: NightDate = None,
    instrument: Instrument = None,
    wavelengths: Wavelengths = None,
    baselines: Baselines = None,
    station: Station = None,
    use: Use = None,
    field: HalfField = None,
    step: Annotated[float | None, typer.Option(help="Of the grid, mas.")] = None,
    diameter: Diameter = None,
    companion_diameter: CompanionDiameter = None,
    companions: Annotated[int, typer.Option(min=1, max=2, help="How many to look for.")] = 1,
    fibre: Annotated[
        float | None, typer.Option(help="Full width at half maximum of the field of view, mas.")
    ] = None,
    shared_baselines: SharedBaselines = False,
    v2_calibration: V2Calibration = 0.0,
    t3_calibration: T3Calibration = 0.0,
    ignore_correlations: IgnoreCorrelations = False,
    flip_phase: FlipPhase = False,
    error_scale: ErrorScale = None,
    error_floor: ErrorFloor = None,
    primary_shape: Annotated[str, typer.Option(help=SHAPES)] = "disc",
    companion_shape: Annotated[str, typer.Option(help=SHAPES)] = "disc",
    fix: Annotated[
        list[str] | None, typer.Option(metavar="NAME=VALUE", help="Fix a parameter; repeatable.")
    ] = None,
    fit: Annotated[
        list[str] | None, typer.Option(metavar="NAME", help="Fit a parameter; repeatable.")
    ] = None,
    prior: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME=MEAN,SIGMA", help="Fit one with a prior; repeatable."),
    ] = None,
    contrast_per_instrument: Annotated[
        bool, typer.Option("--contrast-per-instrument", help="Each has its own contrast.")
    ] = False,
    false_alarm: Annotated[
        float, typer.Option(min=0, max=1, help="Claim what noise imitates less often than this.")
    ] = CLAIM,
    noise_searches: Annotated[
        int, typer.Option(min=100, help="Searches of pure noise, at most.")
    ] = 1000,
    bootstrap: Annotated[
        int, typer.Option(min=0, help="Resamplings of the data for errors from their scatter.")
    ] = 0,
    pictures: Annotated[
        Path | None, typer.Option(help="Folder for the map and the data against the model.")
    ] = None,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Search one night for a companion, everywhere in a field and without a start value.

    Parameters to fix or fit: primary_diameter, primary_darkening, background, and of the companion
    slope (the power of the wavelength that its contrast follows), diameter, darkening. Diameters
    are in mas.
    """
    import astropy.units as u
    import numpy as np

    from ..companion.search import Stars
    from ..companion.search import search as look
    from ..progress import Bar

    half, grid_step = length("--field", field), length("--step", step)
    if fibre is not None and not fibre > 0:
        raise typer.BadParameter(f"--fibre must be positive, got {fibre}")
    stars = Stars(
        primary=primary_shape,
        companion=companion_shape,
        fixed={name: values[0] for name, values in map(partial(named, count=1), fix or ())},
        free=tuple(fit or ()),
        priors={name: tuple(v) for name, v in map(partial(named, count=2), prior or ())},
        contrast_per_instrument=contrast_per_instrument,
        fibre_fwhm=fibre,
    )
    observation = read_night(
        files, target=target, night=night, flip_phase=flip_phase,
        selection=selection(
            instrument=instrument, wavelengths=wavelengths, baselines=baselines, station=station
        ),
        use=use, error_scale=error_scale, error_floor=error_floor,
    )  # fmt: skip
    paths = _picture_paths(pictures, observation.target, observation.mjd, force=force)
    result = checked(
        look,
        observation,
        field=half,
        step=grid_step,
        diameter=None if diameter is None else diameter * u.mas,
        companion_diameter=None if companion_diameter is None else companion_diameter * u.mas,
        stars=stars,
        errors=error_model(
            shared_baselines=shared_baselines,
            v2_calibration=v2_calibration,
            t3_calibration=t3_calibration,
            ignore_correlations=ignore_correlations,
        ),
        companions=companions,
        noise_searches=noise_searches,
        resamplings=bootstrap,
        rng=np.random.default_rng(seed),
        progress=Bar(),
    )
    say(describe(result), json=json)
    if paths:
        from ..plots import style
        from ..plots.epoch import draw_epoch
        from ..plots.field import draw_field

        style.save(draw_field(result, columns=2), paths[0], force=force)
        style.save(draw_epoch(observation, result), paths[1], force=force)
        say(f"  pictures   {paths[0]}, {paths[1]}", json=json)
    if json:
        emit(result.to_json())
    if not result.best.false_alarm_probability < false_alarm:
        raise NothingFound(
            f"{result.target}: no companion can be claimed: noise alone looks as good in "
            f"{result.best.false_alarm_probability:.2g} of its searches (limit {false_alarm:g})"
        )


def _picture_paths(folder: Path | None, target: str, mjd: float, *, force: bool) -> list[Path]:
    """Where the pictures go, refused before the work where they exist."""
    if folder is None:
        return []
    stem = f"{'-'.join(target.lower().split())}-{mjd:.3f}"
    paths = [folder / f"{stem}-{what}.png" for what in ("field", "data")]
    refuse_existing(*paths, force=force)
    return paths


def describe(result: "SearchResult") -> str:
    """The result in lines for people."""
    grid = result.maps.grid
    lines = [
        f"{result.target}, {result.instrument}, MJD {result.mjd:.4f}: "
        f"{_counts(result)}, "
        f"{grid.side} x {grid.side} positions within {grid.half * grid.step:.4g} mas"
    ]
    if result.previous is not None:
        lines.append(f"  the first companion: {_place(result.previous.best)}")
    best = result.best
    lines += [
        f"  best       {_place(best)}",
        f"  primary    {_diameter(best.primary_diameter_mas, best.primary_diameter_error_mas)}",
        f"  companion  {_companion(best)}",
        f"  chi-square {best.chi2:.1f} for {best.dof} degrees of freedom, "
        f"{best.delta_chi2:.1f} less than without it",
    ]
    if best.error_scale > 1:
        lines.append(
            f"  errors are scaled by {best.error_scale:.3f}, for a reduced chi-square of 1; "
            "divide by it for errors as stated"
        )
    if result.bootstrap is not None:
        errors = result.bootstrap.to_json()
        lines.append(
            f"  errors by resampling {errors['blocks']} blocks: {errors['separation_err_mas']:.3f} "
            f"mas, {errors['position_angle_err_deg']:.3f} deg, {errors['contrast_err']:.2g}"
        )
    lines.append(f"  local significance {best.significance_sigma:.1f} sigma; {_chance(result)}")
    lines += [
        f"  or         {_place(one)}  (weight {one.weight:.3g})"
        for one in result.alternatives[:MOST_SHOWN]
    ]
    more = len(result.alternatives) - MOST_SHOWN
    if more > 0:
        lines.append(f"  and {more} more, which --json lists")
    return "\n".join(lines)


def _counts(result: "SearchResult") -> str:
    kinds = [
        (result.n_v2, "V2"),
        (result.n_t3, "closure phases"),
        (result.n_t3amp, "triple amplitudes"),
        (result.n_visamp, "visibility amplitudes"),
        (result.n_visphi, "visibility phases"),
    ]
    return " and ".join(f"{count} {name}" for count, name in kinds if count)


def _place(one: "Candidate") -> str:
    return (
        f"{one.separation_mas:.3f} +- {one.separation_error_mas:.3f} mas, "
        f"PA {one.position_angle_deg:.3f} +- {one.position_angle_error_deg:.3f} deg, "
        f"contrast {one.contrast:.4g} +- {one.contrast_error:.2g}"
    )


def _diameter(value: float, error: float) -> str:
    if value == 0:
        return "a point"
    return f"{value:.3f} +- {error:.3f} mas" if error else f"{value:.3f} mas (fixed)"


def _companion(best: "Candidate") -> str:
    value, error = best.companion_diameter_mas, best.companion_diameter_error_mas
    prior = best.companion_diameter_prior_mas
    if prior is None:
        return _diameter(value, error)
    words = _diameter(value, error) if value else f"below {error:.3f} mas"
    return f"{words}, for a prior of its square of 0 +- ({prior:.3f} mas)^2"


def _chance(result: "SearchResult") -> str:
    chance = result.best.false_alarm_probability
    count = len(result.false_alarms.maxima)
    words = "below 1e-9" if chance < 1e-9 else f"{chance:.2g}"
    how = (
        "extrapolated by the law of maxima of a random field from" if result.extrapolated else "of"
    )
    return f"false alarm {words} over the field, {how} {count} noise searches"
