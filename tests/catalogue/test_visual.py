"""The fixed-width lines of orbits of visual binaries."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from orbits.catalogue import Catalogue
from orbits.catalogue.visual import import_visual_orbits
from orbits.errors import InputError

ORBITS = "orb6orbits.txt"


def line_of(**changes: str) -> str:
    """One line, 264 characters long, of an orbit that is all right but for the changes."""
    fields = {
        0: "003719.79-244602.0",
        19: "00373-2446",
        30: "BU  395",
        80: changes.get("period", "  25.09"),
        92: changes.get("period_unit", "y"),
        94: changes.get("period_error", " 0.029"),
        106: changes.get("axis", "0.667"),
        114: changes.get("axis_unit", "a"),
        116: changes.get("axis_error", "0.0070"),
        125: changes.get("inclination", "77.6"),
        143: changes.get("node", "291.8"),
        151: changes.get("flag", " "),
        163: changes.get("periastron", "1898.5"),
        174: changes.get("periastron_unit", "y"),
        187: changes.get("eccentricity", "0.235"),
        206: changes.get("argument", "317."),
        223: changes.get("equinox", "2000"),
        237: "Xyz2000b",
    }
    line = [" "] * 264
    for start, text in fields.items():
        line[start : start + len(text)] = text
    return "".join(line)


def import_line(tmp_path, **changes):
    path = tmp_path / "orbits.txt"
    path.write_text(f"Orbits\n\n{line_of(**changes)}\n")
    return import_visual_orbits(path)


def test_every_line_is_imported_or_named(outside):
    lines = (outside / ORBITS).read_text(encoding="latin-1").splitlines()
    orbits = [number for number, line in enumerate(lines, 1) if line[9:10] in ("+", "-")]
    entries, refusals = import_visual_orbits(outside / ORBITS)
    assert len(orbits) == 2096  # all lines below the head of the file but one blank one
    assert len(entries) + len(refusals) == len(orbits)
    assert {refusal.line for refusal in refusals} <= set(orbits)
    assert all(refusal.reason and refusal.name for refusal in refusals)
    assert len(Catalogue.of(entries)) == len(entries)  # the keys are unique, the values possible
    # Lines known to be unusable: the misprinted date of lambda Virginis, an orbit without elements.
    reasons = {refusal.name: refusal.reason for refusal in refusals}
    assert "453070.3 is neither a full nor a truncated" in reasons["14191-1322 lam Vir"]
    assert reasons["02124+3018 TZ Tri"] == "no period"


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        # As printed in the papers' own units: Muterspaugh et al. 2008, Torres et al. 2002, Zwahlen
        # et al. 2004, and 12 Boo of Boden et al. 2005, whose period is in hours.
        ("21145+1000 STT 535AB", {"period": 2084.03, "semimajor_axis": 231.9650, "node": 23.362}),
        ("20329+4154 BLA 8", {"period": 57.32178, "periastron": 51353.313, "argument": 357.40}),
        ("03492+2403 MKT 12Aa1,2", {"eccentricity": 0.2385, "inclination_error": 0.49}),
        ("14104+2506 12 Boo", {"period": 9.6045492, "semimajor_axis": 3.451}),
    ],
)
def test_known_orbits(outside, name, expected):
    entries, _ = import_visual_orbits(outside / ORBITS)
    (entry,) = (entry for entry in entries if entry.system == name)
    for column, value in expected.items():
        assert_allclose(entry.number(column), value, rtol=1e-8)  # 12 Boo is rounded to 1e-8 here


def test_units(tmp_path):
    year = 365.242198781  # d, Besselian
    for unit, days in (("m", 1 / 1440), ("h", 1 / 24), ("d", 1), ("y", year), ("c", 100 * year)):
        (entry,), _ = import_line(tmp_path, period_unit=unit)
        assert_allclose(entry.number("period"), 25.09 * days, rtol=1e-12)
        assert_allclose(entry.number("period_error"), 0.029 * days, rtol=1e-12)
    for unit, mas in (("a", 1000), ("m", 1)):
        (entry,), _ = import_line(tmp_path, axis_unit=unit)
        assert_allclose(entry.number("semimajor_axis"), 0.667 * mas)
        assert_allclose(entry.number("semimajor_axis_error"), 0.007 * mas)
    for date in ("51353.813", "2451353.813"):
        (entry,), _ = import_line(tmp_path, periastron=date, periastron_unit="d")
        assert_allclose(entry.number("periastron"), 51353.313, rtol=0, atol=1e-8)


def test_what_is_missing_stays_missing(tmp_path):
    (entry,), _ = import_line(tmp_path, period_error=".", axis_error=".", equinox="    ")
    assert np.isnan([entry.number(n) for n in ("period_error", "semimajor_axis_error")]).all()
    assert np.isnan(entry.number("equinox"))
    assert not entry.ascending
    (entry,), _ = import_line(tmp_path, flag="*")
    assert entry.ascending
    assert_allclose([entry.number("ra"), entry.number("dec")], [9.3324583, -24.7672222], atol=1e-7)
    assert entry.date == "2000"


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"period": ".", "period_unit": " "}, "no period"),
        ({"period_unit": "w"}, "the unit 'w' of the period is none of m, h, d, y, c"),
        ({"axis_unit": " "}, "the unit '' of the semimajor axis is none of a, m"),
        ({"axis": "-4.52"}, "semimajor axis -4.52 is not positive"),
        ({"axis": "4,52"}, "semimajor axis '4,52' is not a number"),
        ({"eccentricity": "1.215"}, "eccentricity 1.215 is not within 0 to 1"),
        ({"eccentricity": "1.0"}, "eccentricity 1 is not within 0 to 1"),
        ({"inclination": "-47.3"}, "inclination -47.3 is not within 0 to 180"),
        ({"node": "."}, "no node"),
        ({"periastron_unit": "x"}, "the unit 'x' of the time of periastron is neither y nor d"),
        (
            {"periastron": "453070.30", "periastron_unit": "d"},
            "periastron 453070.3 is neither a full nor a truncated Julian date",
        ),
        ({"period_error": "0,1"}, "error '0,1' of the period is not a number"),
    ],
)
def test_reasons_of_refusal(tmp_path, changes, reason):
    entries, (refusal,) = import_line(tmp_path, **changes)
    assert not entries
    assert (refusal.line, refusal.name, refusal.reason) == (3, "00373-2446 BU  395", reason)


def test_solutions_of_one_reference_are_numbered(tmp_path):
    path = tmp_path / "orbits.txt"
    path.write_text("\n".join([line_of(), line_of(), line_of()]))
    entries, _ = import_visual_orbits(path)
    assert [e.solution for e in entries] == ["Xyz2000b", "Xyz2000b (2)", "Xyz2000b (3)"]


def test_a_file_of_something_else(tmp_path):
    path = tmp_path / "letter.txt"
    path.write_text("Dear colleague,\n")
    with pytest.raises(InputError, match="no line starts with coordinates"):
        import_visual_orbits(path)
    with pytest.raises(InputError, match="cannot be read: No such file"):
        import_visual_orbits(tmp_path / "missing.txt")
