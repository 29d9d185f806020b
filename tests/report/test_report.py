"""The page of a system: what it says, that it stands alone, and how a browser takes it."""

import io
import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import fitted
import numpy as np
import pytest
from numpy.testing import assert_allclose
from report import browser as chromium

from orbits import provenance
from orbits.report.content import headline, places, quantities, speeds, statements
from orbits.report.page import write_report
from orbits.system import read_system


@pytest.fixture(scope="module")
def page(tmp_path_factory):
    """The page of a system known from tables, and the folder that it stands in."""
    folder = tmp_path_factory.mktemp("system")
    path = fitted.system(folder)
    results = folder / "harrow-7-results"
    command = "nodeline orbit harrow-7.toml --seed 5"
    inputs = (path, folder / "positions.csv")
    provenance.record(results, "orbit", command=command, seed=5, inputs=inputs)
    write_report(read_system(path), folder / "report.html", seed=0)
    return folder / "report.html"


@pytest.fixture(scope="module")
def window(page):
    reason = chromium.missing()
    if reason:
        pytest.skip(reason)
    with chromium.browser() as window:
        window.open(page)
        yield window


class Links(HTMLParser):
    """Collects all that an element refers to."""

    def __init__(self) -> None:
        super().__init__()
        self.found, self.ids, self.open = [], [], []

    def handle_starttag(self, tag, attributes):
        for name, value in attributes:
            if name in ("src", "href", "xlink:href", "action", "data", "poster"):
                self.found.append(value)
            if name == "id":
                self.ids.append(value)


def test_the_page_needs_nothing_from_elsewhere(page):
    text = page.read_text()
    links = Links()
    links.feed(text)
    assert links.found
    assert all(link.startswith(("#", "data:")) for link in links.found)
    assert "@import" not in text
    # Addresses that are not fetched: the names of XML's and matplotlib's vocabularies.
    addresses = set(re.findall(r"https?://[^\s\"'<>]+", text))
    assert all(
        "w3.org" in a or "purl.org" in a or "creativecommons" in a or "matplotlib" in a
        for a in addresses
    )


def test_ids_are_unique_and_links_meet_them(page):
    links = Links()
    links.feed(page.read_text())
    assert len(links.ids) == len(set(links.ids))
    assert {link[1:] for link in links.found if link.startswith("#")} <= set(links.ids)


def test_what_the_page_says(page):
    text = page.read_text()
    for words in (
        "Harrow 7",
        "masses 1.6",
        # MJD 60320 to 60419 and 60305 to 60415; a midnight TDB is 69 s before that of UTC.
        "positions of 10 nights with THICKET_H from 2024-01-10 to 2024-04-18",
        "velocities, 6 of the primary and 6 of the companion, from 2023-12-26 to 2024-04-14",
        "The velocities tell the nodes apart",
        "Chi-square is 40.1 for 22 degrees of freedom",
        "nodeline orbit harrow-7.toml --seed 5",
        "unchanged",
        "THICKET_H",
        "night 3",
        "numpy ",
    ):
        assert words in text


def test_values_from_outside_cannot_become_part_of_the_page(tmp_path):
    path = fitted.system(tmp_path, name="<script>alert(1)</script> & Co")
    write_report(read_system(path), tmp_path / "report.html", seed=0)
    text = (tmp_path / "report.html").read_text()
    assert "<script>alert" not in text
    assert "&lt;script&gt;alert(1)&lt;/script&gt; &amp; Co" in text


def test_tables_hold_what_was_measured_less_the_orbit():
    from orbits.bundle import Bundle

    bundle = Bundle.of_solution(fitted.solution())
    lines = places(bundle)
    expected = bundle.positions.xy - np.stack(bundle.best.offsets(bundle.positions.mjd), -1)[0]
    assert_allclose([[p.rest_east, p.rest_north] for p in lines], expected, atol=1e-12)
    # In units of the ellipse: by solving, where the table inverts.
    for line, rest, covariance in zip(lines, expected, bundle.positions.covariance, strict=True):
        assert_allclose(line.sigma**2, rest @ np.linalg.solve(covariance, rest), rtol=1e-9)
    assert len({line.key for line in lines}) == 10
    model = np.stack(bundle.best.velocities(bundle.velocities.mjd))[:, 0]
    rest = bundle.velocities.velocity - model[bundle.velocities.star, np.arange(12)]
    assert_allclose([line.rest for line in speeds(bundle)], rest, atol=1e-12)


def test_differences_of_velocities_know_no_centre_of_mass():
    """Both stars' velocities less each other: gamma drops out of the data, and is not needed."""
    from orbits.bundle import Bundle

    bundle = Bundle.of_solution(fitted.solution())
    primary, companion = (v[0] for v in bundle.best.velocities(bundle.velocities.mjd))
    pairs = replace(
        bundle.velocities, velocity=companion - primary + 0.3, star=np.full(12, 2, dtype=int)
    )
    unknown = replace(bundle.best, gamma=np.array([np.nan]))
    lines = speeds(replace(bundle, best=unknown, velocities=pairs))
    assert_allclose([line.rest for line in lines], 0.3, atol=1e-12)


def test_what_is_not_determined_is_said():
    whole = fitted.solution()
    assert headline(whole).startswith("period 117.3")
    less = whole.samples.drop(columns=["primary_msun", "companion_msun"])
    visual = replace(whole, samples=less, velocities=None)
    said = " ".join(statements(visual))
    assert "Only the sum of the masses" in said
    assert "recedes" not in said
    bare = replace(visual, samples=less.drop(columns=["total_msun", "parallax_mas"]))
    assert "No mass follows from the data" in " ".join(statements(bare))
    spectroscopic = replace(whole, positions=None)
    assert "Without positions the size, the inclination" in " ".join(statements(spectroscopic))
    account = dict(whole.account) | {
        "undetermined": ["node_deg"],
        "solutions": [{"weight": 0.7}, {"weight": 0.3}],
        "nights": [{"night": "n7", "outlier_probability": 0.98}],
        "notes": ["A note of the fit."],
        "chi2": 90.0,
    }
    doubtful = replace(whole, account=account)
    said = " ".join(statements(doubtful))
    for words in (
        "2 orbits fit, with probabilities 0.700, 0.300",
        "Only bounded, not measured: position angle of the node",
        "Night n7 is an outlier with probability 0.980",
        "larger than errors of the stated size allow",  # 90 for 22: 3e-10
        "A note of the fit.",
    ):
        assert words in said
    assert [q.words for q in quantities(doubtful) if q.bounded] == ["position angle of the node"]


def test_changed_and_missing_inputs_are_named(tmp_path):
    path = fitted.system(tmp_path)
    gone = tmp_path / "gone.csv"
    gone.write_text("x\n")
    inputs = (path, tmp_path / "positions.csv", gone)
    results = tmp_path / "harrow-7-results"
    provenance.record(results, "orbit", command="nodeline orbit", seed=0, inputs=inputs)
    gone.unlink()
    with open(tmp_path / "positions.csv", "a") as table:
        table.write("60331,15.0,99.0,0.1,0.5\n")
    content = write_report(read_system(path), tmp_path / "r.html", seed=0)
    assert {item.input.path: item.state for item in content.inputs} == {
        "harrow-7.toml": "unchanged",
        "positions.csv": "changed since",
        "gone.csv": "missing now",
    }


def test_report_command(nodeline, tmp_path):
    path = fitted.system(tmp_path)
    code, out, _ = nodeline("report", path, "--json")
    assert code == 0
    said = json.loads(out)
    assert said["report"] == str(tmp_path / "harrow-7-results" / "report.html")
    assert (said["positions"], said["velocities"], said["maps"]) == (10, 12, 0)
    code, _, err = nodeline("report", path)
    assert (code, "exists already" in err) == (3, True)
    (tmp_path / "harrow-7-results" / "orbit.json").unlink()
    code, _, err = nodeline("report", path, "--force")
    assert (code, "run `nodeline orbit` first" in err) == (3, True)


def test_the_browser_has_nothing_to_complain_of(window):
    assert window.messages() == []
    assert window.run("return document.title") == "Harrow 7: orbit"
    # Nothing is wider than the page.
    assert window.run("return document.documentElement.scrollWidth - window.innerWidth") <= 0


def test_tables_are_sorted_by_a_click(window):
    column = """
        const table = document.querySelector("#positions table");
        const heads = [...table.tHead.rows[0].cells];
        const head = heads.find(c => c.textContent.startsWith("separation"));
        const number = head.cellIndex;
    """
    read = "return [...table.tBodies[0].rows].map(r => Number(r.cells[number].dataset.value));"
    before = window.run(column + read)
    up = window.run(column + "head.querySelector('button').click();" + read)
    assert window.run(column + "return head.getAttribute('aria-sort')") == "ascending"
    down = window.run(column + "head.querySelector('button').click();" + read)
    assert before != sorted(before)  # else the test would show nothing
    assert up == sorted(before)
    assert down == sorted(before, reverse=True)
    instruments = (
        "const t = document.querySelector('#velocities table');"
        "[...t.tHead.rows[0].cells][1].querySelector('button').click();"
        "return [...t.tBodies[0].rows].map(r => r.cells[1].textContent);"
    )
    assert window.run(instruments) == ["companion"] * 6 + ["primary"] * 6


def test_a_position_names_its_night_and_its_line(window):
    titles = window.run(
        "return [...document.querySelectorAll('#orbit use.position title')].map(t => t.textContent)"
    )
    assert [title.splitlines()[0] for title in titles] == [f"night {n}" for n in range(10)]
    chosen = window.run("""
        document.querySelectorAll("use.position")[3].dispatchEvent(new Event("pointerenter"));
        return [...document.querySelectorAll("tr.chosen")].map(r => r.title);
    """)
    assert chosen == ["night 3"]
    left = window.run("""
        document.querySelectorAll("use.position")[3].dispatchEvent(new Event("pointerleave"));
        return document.querySelectorAll("tr.chosen").length;
    """)
    assert left == 0


def brightness(png: bytes) -> float:
    from matplotlib.image import imread

    return float(imread(io.BytesIO(png), format="png")[..., :3].mean())


def test_light_dark_and_print(window, tmp_path):
    window.scheme("light")
    light = brightness(window.picture())
    window.scheme("dark")
    dark = brightness(window.picture())
    window.scheme("light")
    assert light > 0.85  # mostly paper
    assert dark < 0.25
    pdf = window.print()
    assert pdf.startswith(b"%PDF")
    assert 2 <= len(re.findall(rb"/Type\s*/Page\b", pdf)) <= 8


def test_a_narrow_window_scrolls_no_further_than_its_tables(window, page):
    window.open(page, width=500, height=900)
    assert window.run("return document.documentElement.scrollWidth - window.innerWidth") <= 0
    window.open(page)
