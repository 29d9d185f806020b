"""nodeline inspect: what an OIFITS file holds, what is wrong with it, and a copy put right."""

from pathlib import Path
from typing import Annotated, Any

import typer

from ..errors import InputError
from .frame import Force, Json, emit, say, warn
from .night import Baselines, Instrument, Station, Wavelengths, selection


def inspect(
    files: Annotated[list[Path], typer.Argument(help="OIFITS files.", metavar="FILE...")],
    target: Annotated[str | None, typer.Option(help="Only this target.")] = None,
    instrument: Instrument = None,
    dates: Annotated[
        tuple[str, str] | None,
        typer.Option(help="Only from one date (0 h UTC if no time is given) to another."),
    ] = None,
    wavelengths: Wavelengths = None,
    baselines: Baselines = None,
    station: Station = None,
    flip_phase: Annotated[
        bool, typer.Option("--flip-phase", help="Reverse the sign of all phases.")
    ] = False,
    strict: Annotated[
        bool, typer.Option("--strict", help="Take what is suspicious as unusable.")
    ] = False,
    plot: Annotated[
        Path | None, typer.Option(help="Draw coverage, V2 and closure phases to this file.")
    ] = None,
    colour: Annotated[
        str | None, typer.Option(help="What colours of --plot mean: time or wavelength.")
    ] = None,
    convert: Annotated[
        Path | None, typer.Option(help="Write what is selected to this file, as OIFITS 2.")
    ] = None,
    force: Force = False,
    json: Json = False,
) -> None:
    """Tell what OIFITS files hold and what is wrong with them.

    Several files are told one by one; --plot and --convert take them together.
    """
    from ..files import refuse_existing
    from ..oifits import load
    from ..oifits.checking import check, check_together
    from ..oifits.converting import convert as write_copy
    from ..oifits.flipping import flipped
    from ..oifits.inspection import in_words, problem_entry
    from ..oifits.inspection import inspect as describe
    from ..oifits.joining import join
    from ..oifits.selecting import select
    from ..oifits.validation import validate
    from ..problems import refuse_suspicious
    from ..progress import Bar

    if plot and plot.suffix.lower() not in (".png", ".pdf", ".svg"):
        raise typer.BadParameter("the name of a picture ends in .png, .pdf or .svg")
    if colour not in (None, "time", "wavelength"):
        raise typer.BadParameter(f"--colour is time or wavelength, not {colour!r}")
    refuse_existing(*(path for path in (plot, convert) if path), force=force)
    wanted = selection(
        instrument=instrument, wavelengths=wavelengths, baselines=baselines,
        station=station, dates=dates,
    )  # fmt: skip
    parts, results, nothing = [], [], []
    with Bar().task("reading", total=len(files)) as step:
        for path in dict.fromkeys(files):
            file = load(path)
            file.problems += check(file)
            if flip_phase:
                file = flipped(file)
            step()
            try:
                part = select(file, wanted, target=target)
            except InputError as reason:
                nothing.append(reason)
                continue
            parts.append(part)
            results.append(describe(part, validate(path) if file.version == 2 else None))
    if not parts:
        raise nothing[0]
    say("\n".join(map(in_words, results)), json=json)
    for reason in nothing:
        say(f"left out: {reason}", json=json)
    whole = join(parts)
    together = check_together(whole)
    warn(together)
    whole.problems += together
    if strict:
        refuse_suspicious(whole.problems)
    outcome: dict[str, Any] = {"files": results, "together": list(map(problem_entry, together))}
    if nothing:
        outcome["left_out"] = list(map(str, nothing))
    if plot:
        _draw(whole, plot, colour, force=force)
        outcome["plot"] = str(plot)
        say(f"drawn: {plot}", json=json)
    if convert:
        notes = [f"only {wanted}"] if str(wanted) else []
        notes += [f"only target {target}"] if target is not None else []
        notes += ["sign of all phases reversed"] if flip_phase else []
        copy, breaches = write_copy(whole, convert, notes=notes, force=force)
        outcome["convert"] = {
            "file": str(convert),
            "history": copy.history,
            "breaches": [str(breach) for breach in breaches],
        }
        say(f"written: {convert}, {_verdict(breaches)}", json=json)
    if json:
        emit(outcome)


def _draw(file, path: Path, colour: str | None, *, force: bool) -> None:
    from ..oifits.epochs import observations
    from ..plots.coverage import draw_coverage
    from ..plots.style import save

    save(draw_coverage(observations(file), by=colour), path, force=force)


def _verdict(breaches: list) -> str:
    if not breaches:
        return "valid OIFITS 2"
    return "but it breaks the standard still:\n" + "\n".join(f"  {b}" for b in breaches)
