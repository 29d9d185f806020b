"""The page itself: content gathered, drawings made, the template filled, the file written."""

from datetime import UTC, datetime
from pathlib import Path

import numpy as np

from ..bundle import Bundle
from ..files import refuse_existing, whole_file
from ..fitting.solution import Solution
from ..progress import SILENT, Silent
from ..provenance import history, versions
from ..system import System
from .content import (
    Content,
    NightMap,
    headline,
    inputs,
    observed,
    places,
    quantities,
    speeds,
    statements,
)
from .pictures import inline_png, inline_svg


def write_report(
    system: System, path: Path, *, seed: int, force: bool = False, progress: Silent = SILENT
) -> Content:
    """Write the page of a fitted system to `path`, and return what it says.

    The nights are searched again, with `seed` unless their measurement has kept its own, since
    the maps of the searches are not kept.

    Raises
    ------
    InputError
        If the orbit is not fitted yet, a night cannot be read, or `path` exists and `force` is
        false.
    """
    refuse_existing(path, force=force)
    content = gather(system, seed=seed, progress=progress)
    with whole_file(path, force=force) as temporary:
        temporary.write_text(render(content), encoding="utf-8")
    return content


def gather(system: System, *, seed: int, progress: Silent = SILENT) -> Content:
    """All that the page of a system says."""
    solution = Solution.read(system.results)
    bundle = Bundle.of_solution(solution)
    runs = history(system.results)
    lines = places(bundle)
    return Content(
        name=solution.name,
        headline=headline(solution),
        observed=observed(solution),
        quantities=quantities(solution),
        fit=dict(solution.account),
        statements=statements(solution),
        places=lines,
        speeds=speeds(bundle),
        runs=runs,
        inputs=inputs(system, runs),
        versions=versions(),
        date=datetime.now(UTC).strftime("%Y-%m-%d %H:%M UTC"),
        drawings=_drawings(bundle, lines),
        maps=_maps(system, runs["measure"].seed if "measure" in runs else seed, lines, progress),
    )


def render(content: Content) -> str:
    """The page as text."""
    from jinja2 import Environment, PackageLoader, StrictUndefined, select_autoescape

    environment = Environment(
        loader=PackageLoader("orbits.report"),
        autoescape=select_autoescape(default=True),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("page.html").render(page=content)


def _drawings(bundle: Bundle, lines) -> dict[str, str]:
    """SVG of what the data give, by the name of the drawing."""
    from ..plots.motion import draw_motion, draw_residuals
    from ..plots.sky import draw_sky
    from ..plots.velocity import draw_velocities

    made = {}
    if bundle.on_the_sky:
        titles = [
            (line.key, f"{line.night}\n{line.separation_text} mas at {line.angle_text} deg")
            for line in lines
        ]
        made["sky"] = inline_svg(draw_sky(bundle), "sky", titles=titles)
        made["motion"] = inline_svg(draw_motion(bundle), "motion")
        made["residuals"] = inline_svg(draw_residuals(bundle), "residuals")
    if np.isfinite([bundle.best.k1[0], bundle.best.k2[0]]).any():
        made["velocity"] = inline_svg(draw_velocities(bundle), "velocity")
    return made


def _maps(system: System, seed: int, lines, progress: Silent) -> list[NightMap]:
    """The map of every night, in order of time."""
    if not system.nights:
        return []
    from ..measuring import measure
    from ..plots.field import draw_field

    keys = {line.night: line.key for line in lines}
    nights = measure(system, rng=np.random.default_rng(seed), progress=progress)
    made = []
    with progress.task("drawing maps", total=len(nights)) as step:
        for night in nights:
            seen = night.observation
            counts = f"{len(seen.v2)} squared visibilities, {len(seen.t3)} closure phases"
            made.append(
                NightMap(
                    key=keys.get(night.label, ""),
                    label=night.label,
                    verdict=_verdict(night),
                    data=f"{seen.target}, {seen.instrument}: {counts}",
                    picture="" if night.result is None else inline_png(draw_field(night.result)),
                )
            )
            step()
    return made


def _verdict(night) -> str:
    """What was found in a night, in a sentence."""
    if not night.candidates:
        return "No companion fits better than a single star."
    best = night.candidates[0]
    found = (
        f"{best.separation_mas:.3f} mas at {best.position_angle_deg:.3f} deg, contrast "
        f"{best.contrast:.4f}, {best.significance_sigma:.1f} sigma, chi-square {best.chi2:.0f} for "
        f"{best.dof} degrees of freedom"
    )
    if not night.detected:
        return f"Nothing that can be claimed; the best place is {found}."
    others = len(night.candidates) - 1
    if others:
        found += f"; {others} other place{'s' if others > 1 else ''} cannot be excluded"
    return f"Companion at {found}."
