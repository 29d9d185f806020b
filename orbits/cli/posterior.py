"""nodeline posterior: every place where a night allows a companion, with its share."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from .frame import Force, Json, Seed, emit, say
from .night import (
    CompanionDiameter,
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
    from ..companion.posterior_result import EpochPosterior

_SHOWN = 10


def posterior(
    files: NightFiles,
    target: Target = None,
    night: NightDate = None,
    field: HalfField = None,
    diameter: Diameter = None,
    companion_diameter: CompanionDiameter = None,
    shared_baselines: SharedBaselines = False,
    v2_calibration: V2Calibration = 0.0,
    t3_calibration: T3Calibration = 0.0,
    ignore_correlations: IgnoreCorrelations = False,
    flip_phase: FlipPhase = False,
    use: Use = None,
    error_scale: ErrorScale = None,
    error_floor: ErrorFloor = None,
    live_points: Annotated[int, typer.Option(min=50, help="Of nested sampling.")] = 200,
    output: Annotated[Path | None, typer.Option(help="Samples (ECSV).")] = None,
    positions: Annotated[
        Path | None, typer.Option(help="The modes as a table of positions for nodeline orbit.")
    ] = None,
    seed: Seed = 0,
    force: Force = False,
    json: Json = False,
) -> None:
    """Sample all of a night's posterior: every solution with its share, and the evidence.

    Flat priors: places in the field, contrasts from 0 to 1, diameters up to 3 resolutions. The
    square of the diameter of a companion that is not resolved has the prior of the search.
    """
    import astropy.units as u
    import numpy as np

    from ..companion.posterior import posterior as sample
    from ..files import refuse_existing, whole_file
    from ..oifits.utc import night_label
    from ..positions import write_positions
    from ..progress import Bar

    refuse_existing(*(path for path in (output, positions) if path), force=force)
    half, primary = length("--field", field), length("--diameter", diameter)
    observation = read_night(
        files, target=target, night=night, flip_phase=flip_phase,
        use=use, error_scale=error_scale, error_floor=error_floor,
    )  # fmt: skip
    result = sample(
        observation,
        field=half,
        diameter=primary,
        companion_diameter=None if companion_diameter is None else companion_diameter * u.mas,
        errors=error_model(
            shared_baselines=shared_baselines, v2_calibration=v2_calibration,
            t3_calibration=t3_calibration, ignore_correlations=ignore_correlations,
        ),
        live_points=live_points,
        rng=np.random.default_rng(seed),
        progress=Bar(),
    )  # fmt: skip
    say(describe(result), json=json)
    if output:
        with whole_file(output, force=force) as temporary:
            result.table().write(temporary, format="ascii.ecsv", overwrite=True)
        say(f"  samples    {output}", json=json)
    if positions:
        label = f"{night_label(observation.mjd)} {observation.instrument}"
        write_positions(positions, result.positions(label), force=force)
        say(f"  positions  {positions}", json=json)
    if json:
        emit(result.to_json())


def describe(result: "EpochPosterior") -> str:
    """The modes in lines for people."""
    import numpy as np

    from ..positions import position_angle

    x, y, contrast = (result.names.index(name) for name in ("x", "y", "contrast"))
    evidence = result.log_evidence / np.log(10)
    lines = [
        f"{result.target}, {result.instrument}, MJD {result.mjd:.4f}: "
        f"{len(result.samples)} samples, {len(result.modes)} places",
        f"  a pair is 10^{evidence:.2f} times as probable as a single star, if equally likely "
        "before, for flat priors",
    ]
    for one in result.modes[:_SHOWN]:
        east, north = one.mean[[x, y]]
        spread = np.sqrt(np.diag(one.covariance))
        angle = position_angle(east, north)
        lines.append(
            f"  {100 * one.weight:5.1f}%  {np.hypot(east, north):.3f} mas, PA {angle:.2f} deg "
            f"(x {east:.3f} +- {spread[x]:.3f}, y {north:.3f} +- {spread[y]:.3f}), "
            f"contrast {one.mean[contrast]:.4g} +- {spread[contrast]:.2g}"
        )
    if len(result.modes) > _SHOWN:
        lines.append(f"  and {len(result.modes) - _SHOWN} more, which --json lists")
    elsewhere = float(np.mean(result.mode < 0))
    if elsewhere > 0:
        lines.append(f"  {100 * elsewhere:5.1f}%  at none of these places")
    return "\n".join(lines)
