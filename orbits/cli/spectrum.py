"""nodeline spectrum: the contrast of a companion, channel by channel."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from ..errors import NothingFound
from .frame import Force, Json, Seed, emit, say
from .night import (
    Diameter,
    ErrorFloor,
    ErrorScale,
    FlipPhase,
    HalfField,
    IgnoreCorrelations,
    NightDate,
    NightFiles,
    SharedBaselines,
    T3Calibration,
    Target,
    Use,
    V2Calibration,
    error_model,
    length,
    read_night,
)

if TYPE_CHECKING:
    from ..companion.spectrum import ContrastSpectrum

_SHOWN = 12
"""Channels in the table for people; the file has all of them."""


def spectrum(
    files: NightFiles,
    target: Target = None,
    night: NightDate = None,
    field: HalfField = None,
    diameter: Diameter = None,
    bins: Annotated[
        int | None, typer.Option(min=1, help="For each instrument; else every channel.")
    ] = None,
    fix_place: Annotated[
        bool, typer.Option("--fix-place", help="Take the place found for known exactly.")
    ] = False,
    shared_baselines: SharedBaselines = False,
    v2_calibration: V2Calibration = 0.0,
    t3_calibration: T3Calibration = 0.0,
    ignore_correlations: IgnoreCorrelations = False,
    flip_phase: FlipPhase = False,
    use: Use = None,
    error_scale: ErrorScale = None,
    error_floor: ErrorFloor = None,
    output: Annotated[Path | None, typer.Option(help="Table (ECSV), with the covariance.")] = None,
    picture: Annotated[Path | None, typer.Option(help="A .png, .pdf or .svg file.")] = None,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Find the companion of a night and measure its contrast in every channel.

    The channels are fitted together, with the place of the companion and the diameters of the
    stars, whose errors tie the contrasts together: the covariance says how.
    """
    import numpy as np

    from ..companion.search import FALSE_ALARM, search
    from ..companion.spectrum import spectrum as measure
    from ..files import refuse_existing, whole_file
    from ..progress import Bar

    if picture and picture.suffix.lower() not in (".png", ".pdf", ".svg"):
        raise typer.BadParameter("the name of a picture ends in .png, .pdf or .svg")
    refuse_existing(*(path for path in (output, picture) if path), force=force)
    half, primary = length("--field", field), length("--diameter", diameter)
    observation = read_night(
        files, target=target, night=night, flip_phase=flip_phase,
        use=use, error_scale=error_scale, error_floor=error_floor,
    )  # fmt: skip
    errors = error_model(
        shared_baselines=shared_baselines, v2_calibration=v2_calibration,
        t3_calibration=t3_calibration, ignore_correlations=ignore_correlations,
    )  # fmt: skip
    found = search(
        observation, field=half, diameter=primary, errors=errors,
        rng=np.random.default_rng(seed), progress=Bar(),
    )  # fmt: skip
    if not found.best.false_alarm_probability < FALSE_ALARM:
        raise NothingFound(
            f"{found.target}: no companion can be claimed, so there is no spectrum of one"
        )
    result = measure(observation, found.best, bins=bins, fix_place=fix_place, errors=errors)
    say(describe(result), json=json)
    if output:
        with whole_file(output, force=force) as temporary:
            result.table().write(temporary, format="ascii.ecsv", overwrite=True)
        say(f"  table      {output}", json=json)
    if picture:
        from ..plots import style
        from ..plots.spectrum import draw_spectrum

        style.save(draw_spectrum(result), picture, force=force)
        say(f"  picture    {picture}", json=json)
    if json:
        emit(result.to_json())


def describe(result: "ContrastSpectrum") -> str:
    """The spectrum in lines for people, every so many channels."""
    place = "taken for known" if result.place_fixed else "fitted too"
    lines = [
        f"{result.target}: contrast in {len(result.contrast)} channels; place {place}, "
        f"x {result.x_mas:.3f}, y {result.y_mas:.3f} mas",
        f"  chi-square {result.chi2:.1f} for {result.dof} degrees of freedom",
    ]
    step = -(-len(result.contrast) // _SHOWN)
    lines += [
        f"  {1e6 * result.wavelength[k]:.4f} um   {result.contrast[k]:.5f} +- {result.error[k]:.5f}"
        for k in range(0, len(result.contrast), step)
    ]
    flat = result.flatness
    if flat is not None:
        plural = "s" if flat.dof > 1 else ""
        lines.append(
            f"  against one constant, {flat.contrast:.5f}: chi-square {flat.chi2:.1f} for "
            f"{flat.dof} degree{plural} of freedom (p = {flat.probability:.2g})"
        )
    return "\n".join(lines)
