"""Options that the commands on one night share."""

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from .frame import warn

if TYPE_CHECKING:
    import astropy.units as u

    from ..companion.covariance import ErrorModel
    from ..observation import Observation
    from ..oifits import Selection

NightFiles = Annotated[
    list[Path], typer.Argument(help="OIFITS files of one night.", metavar="FILE...")
]
Target = Annotated[str | None, typer.Option(help="Name, where the files hold several.")]
NightDate = Annotated[str | None, typer.Option(help="Date, where the files hold several.")]
HalfField = Annotated[float | None, typer.Option(help="Half the side of the field, mas.")]
Diameter = Annotated[float | None, typer.Option(help="Of the primary, mas; else fitted.")]
CompanionDiameter = Annotated[
    float | None, typer.Option(help="Of the companion, mas; else fitted where it shows.")
]
SharedBaselines = Annotated[
    bool, typer.Option("--shared-baselines", help="Closure phases share their baselines' noise.")
]
V2Calibration = Annotated[
    float, typer.Option(min=0, help="Error of V2 common to all channels, as a part of V2.")
]
T3Calibration = Annotated[
    float, typer.Option(min=0, help="Closure-phase error common to all channels, deg.")
]
IgnoreCorrelations = Annotated[
    bool, typer.Option("--ignore-correlations", help="Take all data for independent.")
]
FlipPhase = Annotated[
    bool, typer.Option("--flip-phase", help="The files have phases of the opposite sign.")
]
Between = tuple[float, float]
Instrument = Annotated[str | None, typer.Option(help="Only this INSNAME.")]
Wavelengths = Annotated[Between | None, typer.Option(help="Only between these, um.")]
Baselines = Annotated[Between | None, typer.Option(help="Only between these, m.")]
Station = Annotated[
    list[str] | None, typer.Option(help="Only between the stations named; repeatable.")
]
Use = Annotated[
    list[str] | None,
    typer.Option(
        metavar="NAME",
        help="Observable: v2 and t3, unless told otherwise; t3amp, visamp, visphi; repeatable.",
    ),
]
ErrorScale = Annotated[
    list[str] | None,
    typer.Option(metavar="NAME=FACTOR", help="For the errors of an observable; repeatable."),
]
ErrorFloor = Annotated[
    list[str] | None,
    typer.Option(
        metavar="NAME=ERROR", help="Least error of an observable, deg for phases; repeatable."
    ),
]


def read_night(
    files: Sequence[Path],
    *,
    target: str | None,
    night: str | None,
    flip_phase: bool,
    selection: "Selection | None" = None,
    use: Sequence[str] | None = None,
    error_scale: Sequence[str] | None = None,
    error_floor: Sequence[str] | None = None,
) -> "Observation":
    """The one night that is meant, after a word about what is suspicious in its files."""
    from ..observation import DEFAULT
    from ..oifits import ErrorBars, Selection, read

    observation = checked(
        read,
        files,
        target=target,
        night=night,
        flip_phase=flip_phase,
        selection=selection or Selection(),
        observables=use or DEFAULT,
        errors=checked(ErrorBars.of, numbers(error_scale), numbers(error_floor)),
    )
    warn(observation.problems)
    return observation


def selection(
    *,
    instrument: str | None,
    wavelengths: Between | None,
    baselines: Between | None,
    station: Sequence[str] | None,
    dates: tuple[str, str] | None = None,
) -> "Selection":
    """The part of the data that the options name."""
    import astropy.units as u
    from astropy.time import Time

    from ..dates import read_date
    from ..oifits import Selection

    return Selection(
        instrument=instrument,
        dates=dates and tuple(Time(read_date(date), format="mjd", scale="tdb") for date in dates),
        wavelengths=None if wavelengths is None else wavelengths * u.um,
        baselines=None if baselines is None else baselines * u.m,
        stations=tuple(station or ()),
    )


def length(option: str, value: float | None) -> "u.Quantity | None":
    """The value of `option` in mas, which must be positive; None where it was not given."""
    import astropy.units as u

    if value is None:
        return None
    if not value > 0:
        raise typer.BadParameter(f"{option} must be positive, got {value}")
    return value * u.mas


def error_model(
    *,
    shared_baselines: bool,
    v2_calibration: float,
    t3_calibration: float,
    ignore_correlations: bool,
) -> "ErrorModel":
    """How the errors of a night hang together, as its options say."""
    import numpy as np

    from ..companion.covariance import ErrorModel

    return ErrorModel(
        correlated=not ignore_correlations,
        shared_baselines=shared_baselines,
        v2_calibration=v2_calibration,
        t3_calibration=float(np.radians(t3_calibration)),
    )


def numbers(given: Sequence[str] | None) -> dict[str, float]:
    """Values of NAME=VALUE, by name."""
    return {name: values[0] for name, values in (named(text, count=1) for text in given or ())}


def named(text: str, *, count: int) -> tuple[str, list[float]]:
    """NAME=NUMBER,... as a name and `count` numbers."""
    name, _, numbers = text.partition("=")
    try:
        values = [float(number) for number in numbers.split(",")]
    except ValueError:
        values = []
    if len(values) != count:
        form = "NAME=VALUE" if count == 1 else "NAME=MEAN,SIGMA"
        raise typer.BadParameter(f"expected {form}, got {text!r}")
    return name, values


def checked(call: Callable[..., Any], *arguments: Any, **options: Any) -> Any:
    """Call `call`; a wrong argument is wrong usage here, since all of them come from options."""
    try:
        return call(*arguments, **options)
    except ValueError as error:
        raise typer.BadParameter(str(error)) from error
