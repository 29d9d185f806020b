"""What a file holds and what is wrong with it, in numbers (for machines) and words (for people)."""

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from ..constants import MAS
from ..observation import DEFAULT
from ..problems import Problem, Severity
from .epochs import GAP, night_starts
from .links import plain
from .model import BaselineTable, Flux, OIFile
from .observables import KINDS, sound, timed, usable
from .utc import night_label
from .validation import Breach

LARGEST_CLOSURE_PHASE = 1.5 * 3**0.5
"""Largest closure phase, rad, of a companion of contrast 1, to first order in the contrast: when
the two legs of a triangle see it turned by 120 degrees (Le Bouquin & Absil 2012, A&A 541, A89)."""


def inspect(file: OIFile, breaches: Sequence[Breach] | None = None) -> dict[str, Any]:
    """A description of `file` made of plain numbers, text, lists and dictionaries.

    Numbers that the file does not give are absent. Lengths and angles are in the unit that the
    name of the entry ends in. `breaches` are what `validation.validate` says, if it was asked.
    """
    verdict = {} if breaches is None else {"breaches": [str(breach) for breach in breaches]}
    return {
        "file": file.source,
        "version": file.version,
        "targets": list(_targets(file)),
        "instruments": [_instrument(file, w.insname) for w in file.wavelengths],
        "arrays": [
            {"name": array.arrname, "stations": array.sta_name.tolist()} for array in file.arrays
        ],
        "data": {kind: _counts(file, kind) for kind in KINDS if file.of(KINDS[kind].table)},
        "spectra": sum(len(table) for table in file.of(Flux)),
        "correlations": sum(len(table) for table in file.correlations),
        **_reach(file),
        **_precision(file),
        "problems": [problem_entry(problem) for problem in file.problems],
    } | verdict


def _targets(file: OIFile) -> Iterator[dict[str, Any]]:
    """Each target that has data, with its nights."""
    names = file.target.target.tolist()
    for name in dict.fromkeys(map(plain, names)):
        rows = [row for row, other in enumerate(names) if plain(other) == name]
        ids = file.target.target_id[rows]
        nights = list(_nights(file, ids))
        if nights:
            entry: dict[str, Any] = {"name": names[rows[0]]}
            position = (file.target.raep0[rows[0]], file.target.decep0[rows[0]])
            if np.isfinite(position).all() and any(position):  # 0, 0 stands for unknown
                entry |= {"ra_deg": float(position[0]), "dec_deg": float(position[1])}
            yield entry | {"nights": nights}


def _nights(file: OIFile, ids: np.ndarray) -> Iterator[dict[str, Any]]:
    """Each night of a target, with the numbers of usable data."""
    tables = [table for table in file.data if isinstance(table, BaselineTable)]
    mine = [np.isin(table.target_id, ids) & timed(table) for table in tables]
    times = np.concatenate([t.mjd[rows] for t, rows in zip(tables, mine, strict=True)] or [[]])
    if not times.size:
        return
    starts = night_starts(times, GAP.to_value("d"))
    counts = {name: np.zeros(len(starts), dtype=int) for name in ("v2", "t3")}
    instruments: list[set[str]] = [set() for _ in starts]
    for table, rows in zip(tables, mine, strict=True):
        night = np.searchsorted(starts, table.mjd[rows], side="right") - 1
        for number in np.unique(night):
            instruments[number].add(table.insname)
        for name, count in counts.items():
            if isinstance(table, KINDS[name].table):
                kept = _kept(file, table, name)[rows].sum(axis=1)
                count += np.bincount(night, weights=kept, minlength=len(starts)).astype(int)
    which = np.searchsorted(starts, times, side="right") - 1
    for number in range(len(starts)):
        mjd = float(times[which == number].mean())
        yield {
            "night": night_label(mjd),
            "mjd": mjd,
            "instruments": sorted(instruments[number]),
            "n_v2": int(counts["v2"][number]),
            "n_t3": int(counts["t3"][number]),
        }


def _instrument(file: OIFile, insname: str) -> dict[str, Any]:
    spectrum = file.wavelength(insname)
    wave = spectrum.eff_wave.astype(float)
    entry: dict[str, Any] = {"name": insname, "channels": len(spectrum)}
    good = sound(spectrum)
    if good.any():
        entry |= {
            "shortest_um": float(wave[good].min() * 1e6),
            "longest_um": float(wave[good].max() * 1e6),
        }
    resolution = _resolution(file, insname)
    return entry | ({"spectral_resolution": resolution} if resolution else {})


def _resolution(file: OIFile, insname: str) -> float | None:
    """Median of wavelength over width of the channels; None where widths are unknown."""
    spectrum = file.wavelength(insname)
    wave, band = spectrum.eff_wave.astype(float), spectrum.eff_band.astype(float)
    known = sound(spectrum) & (band > 0) & (band < wave)
    return float(np.median(wave[known] / band[known])) if known.any() else None


def _kept(file: OIFile, table: BaselineTable, name: str) -> np.ndarray:
    return usable(table, KINDS[name]) & sound(file.wavelength(table.insname))


def _counts(file: OIFile, name: str) -> dict[str, int]:
    """How many data are kept, flagged, and left out although not flagged."""
    tables = file.of(KINDS[name].table)
    kept = sum(int(_kept(file, table, name).sum()) for table in tables)
    flagged = sum(int(table.flag.sum()) for table in tables)
    return {
        "kept": kept,
        "flagged": flagged,
        "left_out": sum(table.flag.size for table in tables) - kept - flagged,
    }


def _reach(file: OIFile) -> dict[str, float]:
    """Baselines, and the angles that they and the spectral resolution set."""
    shortest, longest, finest, widest, fields = np.inf, 0.0, np.inf, 0.0, []
    for table in file.data:
        spectrum = file.wavelength(table.insname)
        good = sound(spectrum)
        if not isinstance(table, BaselineTable) or not good.any():
            continue
        names = [n for n, kind in KINDS.items() if isinstance(table, kind.table)]
        used = np.any([_kept(file, table, name).any(axis=1) for name in names], axis=0)
        sides = table.sides[used]
        sides = sides[sides > 0]
        if not sides.size:
            continue
        wave = spectrum.eff_wave[good].astype(float)
        shortest, longest = min(shortest, sides.min()), max(longest, sides.max())
        finest = min(finest, wave.min() / sides.max())
        widest = max(widest, wave.max() / sides.min())
        resolution = _resolution(file, table.insname)
        if resolution:
            fields.append(np.median(wave) * resolution / sides.max())
    if not longest:
        return {}
    result = {
        "shortest_baseline_m": float(shortest),
        "longest_baseline_m": float(longest),
        "resolution_mas": float(finest / 2 / MAS),
        "alias_mas": float(widest / 2 / MAS),
    }
    return result | ({"field_mas": float(min(fields) / MAS)} if fields else {})


def _precision(file: OIFile) -> dict[str, float]:
    """Typical errors, and the contrast whose largest closure phase is one of them."""
    result = {}
    for name, entry in (("v2", "v2_error"), ("t3", "closure_phase_error_deg")):
        kind = KINDS[name]
        parts = [t[kind.error][_kept(file, t, name)] for t in file.of(kind.table)]
        errors = np.concatenate(parts or [np.empty(0)])
        if errors.size:
            result[entry] = float(np.median(errors))
    if "closure_phase_error_deg" in result:
        phase = np.radians(result["closure_phase_error_deg"])
        result["faintest_contrast"] = float(phase / LARGEST_CLOSURE_PHASE)
    return result


def problem_entry(problem: Problem) -> dict[str, str]:
    """A problem as an entry of the JSON of `nodeline inspect`."""
    return {
        "severity": str(problem.severity),
        "table": problem.table,
        "what": problem.what,
        "done": problem.done,
    }


MOST_NIGHTS, MOST_BREACHES = 8, 6
SIGN = """\
  A wrong sign of the phases cannot be seen in one file. It turns every position by 180 deg;
  if the instrument is known for it, use --flip-phase."""


def in_words(result: dict[str, Any]) -> str:
    """The result of `inspect` as one screen of text."""
    lines = [f"{result['file']}: OIFITS {result['version']}", *_verdict(result)]
    for target in result["targets"]:
        place = ""
        if "ra_deg" in target:
            place = f"  (RA {target['ra_deg']:.5f}, Dec {target['dec_deg']:+.5f} deg)"
        lines.append(_row("target", target["name"] + place))
        nights = target["nights"]
        lines += [_row("  night", _night(night)) for night in nights[:MOST_NIGHTS]]
        if len(nights) > MOST_NIGHTS:
            more = len(nights) - MOST_NIGHTS
            lines.append(_row("", f"and {more} more, the last {nights[-1]['night'][:10]}"))
    lines += [_row("instrument", _spectrum(one)) for one in result["instruments"]]
    for array in result["arrays"]:
        lines.append(_row("array", f"{array['name']}: {' '.join(array['stations'])}"))
    lines += [
        *_amounts(result),
        *_angles(result),
        *_felt(result),
        *_faults(result["problems"]),
        SIGN,
    ]
    return "\n".join(lines)


def _verdict(result: dict[str, Any]) -> Iterator[str]:
    """Whether a file is valid, if that was looked into."""
    breaches = result.get("breaches")
    if breaches is not None:
        count = "1 breach" if len(breaches) == 1 else f"{len(breaches)} breaches"
        yield _row("standard", count if breaches else "valid")
        yield from (_row("", breach) for breach in breaches[:MOST_BREACHES])
        if len(breaches) > MOST_BREACHES:
            yield _row("", f"and {len(breaches) - MOST_BREACHES} more")


def _row(head: str, text: str) -> str:
    return f"  {head:<12} {text}"


def _night(night: dict[str, Any]) -> str:
    return (
        f"{night['night'][:10]}  MJD {night['mjd']:.4f}  {'+'.join(night['instruments'])}  "
        f"{night['n_v2']} V2, {night['n_t3']} T3"
    )


def _spectrum(one: dict[str, Any]) -> str:
    text = f"{one['name']}: {one['channels']} channel{'s' if one['channels'] != 1 else ''}"
    if "shortest_um" in one:
        text += f", {one['shortest_um']:.4g} to {one['longest_um']:.4g} um"
    if "spectral_resolution" in one:
        text += f", resolution {one['spectral_resolution']:.3g}"
    return text


def _amounts(result: dict[str, Any]) -> Iterator[str]:
    """How many data there are of each kind."""
    others = []
    for name, counts in result["data"].items():
        word = KINDS[name].words
        if name not in DEFAULT and not counts["kept"]:
            continue
        if name not in DEFAULT:
            others.append(f"{counts['kept']} {word}")
            continue
        text = f"{counts['kept']} {word} kept, {counts['flagged']} flagged"
        yield _row("data", text + (f", {counts['left_out']} left out" * bool(counts["left_out"])))
    if others:
        yield _row("  also", ", ".join(others) + ": off unless asked for")
    if result["spectra"]:
        yield _row("  also", f"{result['spectra']} spectra: kept in copies")
    if result["correlations"]:
        yield _row("  also", f"{result['correlations']} correlations between data")


def _angles(result: dict[str, Any]) -> Iterator[str]:
    if "resolution_mas" not in result:
        return
    yield _row(
        "baselines",
        f"{result['shortest_baseline_m']:.4g} to {result['longest_baseline_m']:.4g} m",
    )
    yield _row("resolution", f"{result['resolution_mas']:.3g} mas, lambda/2B")
    yield _row("aliases", f"beyond {result['alias_mas']:.3g} mas, lambda/2B of the shortest B")
    if "field_mas" in result:
        yield _row("field", f"{result['field_mas']:.3g} mas, lambda^2/(B dlambda)")


def _felt(result: dict[str, Any]) -> Iterator[str]:
    parts = []
    if "v2_error" in result:
        parts.append(f"V2 {result['v2_error']:.2g}")
    if "closure_phase_error_deg" in result:
        contrast = result["faintest_contrast"]
        parts.append(
            f"closure phase {result['closure_phase_error_deg']:.2g} deg, which feels "
            f"a contrast of {contrast:.2g}"
            + (f" ({-2.5 * np.log10(contrast):.1f} mag)" if 0 < contrast < 1 else "")
        )
    if parts:
        yield _row("precision", ", ".join(parts))


def _faults(problems: list[dict[str, str]]) -> Iterator[str]:
    """Problems, the worst first; the same one of several tables is told once."""
    if not problems:
        yield _row("problems", "none found")
        return
    order = [str(severity) for severity in sorted(Severity, reverse=True)]
    grouped: dict[tuple[str, str, str], list[str]] = {}
    for p in sorted(problems, key=lambda p: order.index(p["severity"])):
        grouped.setdefault((p["severity"], p["what"], p["done"]), []).append(p["table"])
    for (severity, what, done), tables in grouped.items():
        where = tables[0] + (f" and {len(tables) - 1} more" if len(tables) > 1 else "")
        yield _row(severity, f"{where + ': ' if where else ''}{what}")
        yield _row("", f"-> {done}")
