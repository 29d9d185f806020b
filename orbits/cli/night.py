"""Options that the commands on one night share."""

from pathlib import Path
from typing import Annotated

import typer

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
