"""Drawings of orbits: what can be checked without eyes. Nothing overlaps and nothing is cut."""

from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Annotation, Text
from numpy.testing import assert_allclose
from plots import six

from orbits.bundle import Orbits
from orbits.errors import InputError
from orbits.plots import style
from orbits.plots.motion import draw_motion, draw_residuals
from orbits.plots.plane import draw_plane
from orbits.plots.sheet import PAGE, draw_sheet
from orbits.plots.sky import Mark, draw_sky
from orbits.plots.velocity import draw_velocities
from orbits.velocities import Velocities


def rendered(figure):
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    return canvas.get_renderer()


def words(figure):
    """Each text that is seen, with its box in pixels."""
    renderer = rendered(figure)
    idle = {id(text) for axes in figure.axes for text in _idle_labels(axes)}
    return [
        # The box of an annotation contains its arrow; the words are what must be legible.
        (text.get_text(), Text.get_window_extent(text, renderer))
        for text in figure.findobj(Text)
        if text.get_text().strip() and text.get_visible() and id(text) not in idle
    ]


def _idle_labels(axes):
    """Labels of ticks that are kept in store, or lie beyond the ends of their axis: not drawn."""
    for axis, limits in ((axes.xaxis, axes.get_xlim()), (axes.yaxis, axes.get_ylim())):
        low, high = sorted(limits)
        margin = 1e-9 * (high - low)
        shown = {
            id(label)
            for tick in axis.get_major_ticks()
            if low - margin <= tick.get_loc() <= high + margin
            for label in (tick.label1, tick.label2)
        }
        shown |= {id(axis.label), id(axis.get_offset_text())}
        yield from (text for text in axis.findobj(Text) if id(text) not in shown)


def assert_legible(figure):
    """Every text is inside the figure, none lies on another, none is below 5.5 points."""
    found = words(figure)
    width, height = figure.bbox.width, figure.bbox.height
    for text, box in found:
        inside = min(box.x0, box.y0, width - box.x1, height - box.y1)
        assert inside >= -0.5, f"{text!r} is cut"  # half a pixel of rounding
    for (one, first), (two, second) in combinations(found, 2):
        assert not first.overlaps(second), f"{one!r} lies on {two!r}"
    assert min(text.get_fontsize() for text in figure.findobj(Text) if text.get_text()) >= 5.5


@pytest.mark.parametrize("columns", [1, 2])
@pytest.mark.parametrize("name", six.NAMES)
def test_the_sky_is_legible(name, columns):
    figure = draw_sky(six.orbit(name), columns=columns)
    assert_legible(figure)
    assert_allclose(figure.get_figwidth() * 25.4, {1: 84, 2: 174}[columns])


@pytest.mark.parametrize("name", six.NAMES)
def test_compass_and_scale_bar_lie_on_nothing(name):
    bundle = six.orbit(name)
    figure = draw_sky(bundle)
    renderer = rendered(figure)
    scale = 1e-3 if name == "eccentric" else 1.0
    orbit = np.stack(bundle.best.at_anomaly(np.linspace(-np.pi, np.pi, 20_001)), axis=-1)[0]
    assert len(figure.axes) == (2 if name == "arc only" else 1)
    for axes in figure.axes:
        notes = [note for note in axes.findobj(Annotation) if note.arrow_patch is not None]
        compass = [note for note in notes if note.xycoords == "axes fraction"]
        arrows = [
            axes.transData.transform(np.linspace(note.xyann, note.xy, 20))
            for note in notes
            if note.xycoords == "data"
        ]
        curve = axes.transData.transform(np.concatenate([orbit, bundle.positions.xy]) * scale)
        taken = np.concatenate([curve, *arrows])
        texts = [t for t in axes.texts if t.get_text() in ("N", "E") or t.get_text()[:1].isdigit()]
        assert len(texts) == 3
        assert len(compass) == 2
        boxes = [Text.get_window_extent(text, renderer) for text in texts]
        boxes += [note.arrow_patch.get_window_extent(renderer) for note in compass]
        for box in boxes:
            inside = (taken > [box.x0, box.y0]) & (taken < [box.x1, box.y1])
            assert not inside.all(axis=1).any()


@pytest.mark.parametrize("name", six.NAMES)
def test_north_is_up_east_is_left_and_the_scale_is_one(name):
    figure = draw_sky(six.orbit(name))
    rendered(figure)
    axes = figure.axes[0]
    origin, east, north = axes.transData.transform([(0, 0), (1, 0), (0, 1)])
    assert east[0] < origin[0]
    assert north[1] > origin[1]
    assert_allclose(origin[0] - east[0], north[1] - origin[1], rtol=1e-6)
    for x, y in (axes.get_xlim(), axes.get_ylim()):
        assert min(x, y) < 0 < max(x, y)  # the primary is inside


@pytest.mark.parametrize("name", six.NAMES)
def test_arrows_follow_the_motion(name):
    """A moment after the place nearest to an arrow's tail, the companion is nearer to its head."""
    bundle = six.orbit(name)
    figure = draw_sky(bundle)
    (_, scale) = ("arcsec", 1e-3) if name == "eccentric" else ("mas", 1.0)
    arrows = [
        note
        for note in figure.axes[0].findobj(Annotation)
        if note.arrow_patch is not None and note.xycoords == "data"
    ]
    assert len(arrows) == 2
    mjd = bundle.best.periastron[0] + bundle.best.period[0] * np.linspace(0, 1, 4001)
    x, y = (v[0] * scale for v in bundle.best.offsets(mjd))
    speed = np.stack([np.gradient(x), np.gradient(y)], axis=-1)
    for arrow in arrows:
        tail, head = np.array(arrow.xyann), np.array(arrow.xy)
        middle = (tail + head) / 2
        distance = np.hypot(x - middle[0], y - middle[1])
        # Edge-on the companion passes twice, going opposite ways: the arrow lies to that side of
        # the line that the near half takes; at least one passage goes its way.
        near = distance < distance.min() * 1.05 + 1e-9
        assert (speed[near] @ (head - tail) > 0).any()
    one, two = (np.array(arrow.xy) - arrow.xyann for arrow in arrows)
    if name != "eccentric":
        assert one @ two < 0  # on opposite sides of the orbit


@pytest.mark.parametrize("name", six.NAMES)
def test_the_periastron_is_marked_where_the_true_distance_is_least(name):
    bundle = six.orbit(name)
    scale = 1e-3 if name == "eccentric" else 1.0
    axes = draw_sky(bundle).axes[0]
    marks = [line.get_xydata()[0] for line in axes.lines if line.get_marker() == "D"]
    x, y = bundle.best.offsets(np.array([bundle.best.periastron[0]]))
    if name == "circular":
        assert marks == []
    else:
        assert_allclose(marks, [[x[0, 0] * scale, y[0, 0] * scale]], atol=1e-9)
    (node,) = (line.get_xydata()[0] for line in axes.lines if line.get_marker() == "^")
    assert_allclose(np.degrees(np.arctan2(*node)) % 360, 63.0, atol=1e-9)


def test_ellipses_have_the_directions_and_sizes_of_the_covariances():
    from matplotlib.collections import EllipseCollection

    bundle = six.orbit("face-on")
    figure = draw_sky(bundle)
    rendered(figure)
    (collection,) = figure.axes[0].findobj(EllipseCollection)
    # In data coordinates x is the East offset, so the covariance itself must come out.
    width, height = collection._widths, collection._heights  # half-axes, as matplotlib keeps them
    angle = collection._angles
    for n, expected in enumerate(bundle.positions.covariance):
        along = np.array([np.cos(angle[n]), np.sin(angle[n])])
        across = np.array([-along[1], along[0]])
        made = width[n] ** 2 * np.outer(along, along) + height[n] ** 2 * np.outer(across, across)
        assert_allclose(made, expected, rtol=1e-9, atol=1e-12)


def test_marks_and_comparisons_are_legible():
    one = six.orbit("face-on")
    marks = [Mark(mjd=60020.0, label="2023-03-17"), Mark(mjd=60070.0, label="2023-05-06")]
    assert_legible(draw_sky(one, marks=marks))
    names = ("Harrow 7/first", "Harrow 7/second")
    pair = [replace(one, name=names[0]), replace(six.orbit("period to 20%"), name=names[1])]
    figure = draw_sky(pair)
    assert_legible(figure)
    seen = [text for text, _ in words(figure)]
    assert figure.axes[0].get_title(loc="left") == "Harrow 7"
    assert set(names) <= set(seen)


@pytest.mark.parametrize("columns", [1, 2])
def test_long_names_and_dollars_are_legible(columns, spectroscopic):
    """A name as the imported catalogues have them, and one that would be taken for a formula."""
    long = "14135+5147 STF1821Ba,Bb of a quadruple system with $names$/Kiyaeva 2006 (4)"
    one = replace(spectroscopic, name=long)
    for draw in (draw_sky, draw_velocities, draw_motion, draw_residuals, draw_plane):
        figure = draw(one, columns=columns)
        assert_legible(figure)
        shown = " ".join(text.replace("\n", " ") for text, _ in words(figure))
        # A dollar that stands behind a backslash is drawn, the backslash is not.
        assert long.replace("$", r"\$") in shown
    pair = [one, replace(six.orbit("face-on"), name=long.replace("(4)", "(5)"))]
    assert_legible(draw_sky(pair, columns=columns))
    assert_legible(draw_sheet([one, one]))


def test_an_orbit_known_from_velocities_only_has_no_place_on_the_sky():
    bundle = six.orbit("face-on")
    flat = replace(bundle, best=replace(bundle.best, inclination=np.array([np.nan])))
    with pytest.raises(ValueError, match="its size or inclination is not known"):
        draw_sky(flat)


@pytest.fixture
def spectroscopic(rng):
    bundle = six.orbit("period to 20%")
    speeds = {"k1": np.array([23.5]), "k2": np.array([29.06]), "gamma": np.array([-14.2])}
    best = replace(bundle.best, **speeds)
    mjd, star = 60000 + rng.uniform(0, 300, 24), np.arange(24) % 2
    exact = np.stack(best.velocities(mjd))[:, 0][star, np.arange(24)]
    texts = np.full(24, "", dtype=object)
    measured = Velocities(
        mjd=mjd,
        velocity=exact + rng.normal(0, 0.5, 24),
        error=np.full(24, 0.5),
        star=star,
        instrument=texts,
        source=texts,
    )
    values = {name: getattr(best, name)[0] for name in Orbits.names()}
    from orbits.bundle import draw_orbits

    draws = draw_orbits(values, {"k1": 0.3, "argument": 2.0}, 100, rng)
    return replace(bundle, best=best, draws=draws, velocities=measured)


def test_bands_of_velocity_keep_what_cancels(spectroscopic):
    """Near a circle periastron and its argument may both be off while the velocities are not:
    with w + 360 t / P kept, they change by no more than K times e times the change of w, and the
    changes of w here are below 0.6 rad."""
    best, e = spectroscopic.best, 1e-3
    off = np.linspace(-30, 30, 61)
    best = replace(best, eccentricity=np.array([e]))
    draws = replace(best.select(np.zeros(61, dtype=int)), argument=best.argument + off)
    draws = replace(draws, periastron=best.periastron + off / 360 * best.period)
    figure = draw_velocities(replace(spectroscopic, best=best, draws=draws))
    bands = [band.get_paths()[0].vertices for band in figure.axes[0].collections[:2]]
    assert len(bands) == 2
    for band, k in zip(bands, (23.5, 29.06), strict=True):
        width = [np.ptp(band[band[:, 0] == phase, 1]) for phase in np.unique(band[:, 0])]
        # Both e cos w and the equation of the centre, 2 e sin M, change; to both sides.
        assert max(width) < 2 * k * 3 * e * 0.6


def test_motion_is_as_smooth_at_periastron_as_elsewhere():
    """Of an orbit of e = 0.95 the smallest separation lasts a thousandth of the period; the curve
    must come as near to it as a fine search does."""
    bundle = six.orbit("eccentric")
    figure = draw_motion(replace(bundle, positions=None, draws=bundle.draws.select(slice(0))))
    seen = figure.axes[0].lines[0].get_ydata()
    fine = 60000 + np.linspace(-50, 50, 200_001)
    least = np.hypot(*bundle.best.offsets(fine)).min()
    # Around its extreme, d, the separation is flat: a step of 2 pi / 400 in E, at most half of it
    # away, changes it by less than a (step / 2)^2 = 6e-5 a in any direction.
    assert least <= seen.min() < least + 6.2e-5 * 5200.0
    angle = figure.axes[1].lines[0].get_ydata()
    assert np.abs(np.diff(angle)).max() < 10


@pytest.mark.parametrize("columns", [1, 2])
def test_the_other_drawings_are_legible(spectroscopic, columns):
    for draw in (draw_velocities, draw_motion, draw_residuals, draw_plane):
        assert_legible(draw(spectroscopic, columns=columns))
    assert_legible(draw_velocities(replace(spectroscopic, velocities=None), columns=columns))


@pytest.mark.parametrize("name", six.NAMES)
def test_motion_and_plane_of_all_six_are_legible(name):
    assert_legible(draw_motion(six.orbit(name)))
    assert_legible(draw_plane(six.orbit(name)))
    assert_legible(draw_residuals(six.orbit(name)))


@pytest.mark.parametrize("eccentricity", [0.2, 0.44, 0.7])
def test_the_plane_is_legible_whatever_its_shape(eccentricity):
    """The height of the drawing must suffice wherever its width decides the scale."""
    bundle = six.orbit("face-on")
    shape = replace(bundle.best, eccentricity=np.array([eccentricity]))
    assert_legible(draw_plane(replace(bundle, best=shape)))


def test_motion_over_many_turns_is_legible(spectroscopic):
    assert_legible(draw_motion(spectroscopic, start=60000.0, end=61000.0))
    with pytest.raises(ValueError, match="end must come after the start"):
        draw_motion(spectroscopic, start=60000.0, end=59000.0)


def test_motion_over_very_many_turns_is_folded():
    """Positions keep their distance from the curve, whatever period they were seen in."""
    bundle = six.orbit("face-on")
    turns = 1000.0 * np.arange(12)
    late = replace(bundle.positions, mjd=bundle.positions.mjd + bundle.best.period[0] * turns)
    folded = draw_motion(replace(bundle, positions=late, draws=bundle.draws.select(slice(0))))
    assert_legible(folded)
    assert folded.axes[1].get_xlabel() == "phase from periastron"
    assert_allclose(folded.axes[1].get_xlim(), (0, 1))
    points = folded.axes[0].lines[1]
    assert_allclose(points.get_xdata(), np.arange(12) / 12, atol=1e-9)
    assert_allclose(points.get_ydata(), bundle.positions.separation)


def test_residuals_are_what_was_measured_less_the_orbit(spectroscopic):
    figure = draw_residuals(spectroscopic)
    mjd, xy = spectroscopic.positions.mjd, spectroscopic.positions.xy
    expected = xy - np.stack(spectroscopic.best.offsets(mjd), axis=-1)[0]
    for axes, column in zip(figure.axes, (0, 1), strict=True):
        points = max((line.get_ydata() for line in axes.lines), key=len)
        assert_allclose(points, expected[:, column], atol=1e-12)


def test_what_cannot_be_drawn_is_refused(spectroscopic):
    with pytest.raises(ValueError, match="no positions to take residuals"):
        draw_residuals(replace(spectroscopic, positions=None))
    with pytest.raises(ValueError, match="no velocity amplitude"):
        draw_velocities(six.orbit("face-on"))
    with pytest.raises(ValueError, match="columns must be 1 or 2"):
        draw_sky(six.orbit("face-on"), columns=3)


def test_contact_sheets_are_legible():
    figure = draw_sheet([six.orbit(name) for name in six.NAMES])
    assert_legible(figure)
    with pytest.raises(ValueError, match=f"1 to {PAGE} orbits"):
        draw_sheet([])


@pytest.mark.parametrize("form", style.FORMATS)
def test_the_same_picture_is_the_same_file(form, tmp_path):
    for name in ("one", "two"):
        style.save(draw_sky(six.orbit("edge-on")), tmp_path / f"{name}.{form}")
    assert (tmp_path / f"one.{form}").read_bytes() == (tmp_path / f"two.{form}").read_bytes()
    with pytest.raises(InputError, match="exists already"):
        style.save(draw_sky(six.orbit("edge-on")), tmp_path / f"one.{form}")


def test_unknown_formats_and_settings_of_the_caller(tmp_path):
    import matplotlib

    before = dict(matplotlib.rcParams)
    figure = draw_sky(six.orbit("edge-on"))
    with pytest.raises(ValueError, match=r"ends in .png, .pdf or .svg"):
        style.save(figure, tmp_path / "orbit.jpg")
    assert dict(matplotlib.rcParams) == before


def lightness(colour: str) -> float:
    """CIE L* of an sRGB colour (IEC 61966-2-1)."""
    levels = [int(colour[n : n + 2], 16) / 255 for n in (1, 3, 5)]
    linear = [v / 12.92 if v <= 0.04045 else ((v + 0.055) / 1.055) ** 2.4 for v in levels]
    luminance = np.dot([0.2126, 0.7152, 0.0722], linear)
    return 116 * np.cbrt(luminance) - 16


def test_colours_differ_in_grey():
    """Things drawn over each other differ by 15 or more in lightness, of 100."""
    for one, two in (
        (style.PRIMARY, style.COMPANION),
        (style.CURVE, style.CLOUD),
        (style.CURVE, style.DATUM),
        (style.SERIES[0][0], style.SERIES[1][0]),
        (style.SERIES[1][0], style.SERIES[3][0]),
    ):
        assert abs(lightness(one) - lightness(two)) >= 15
    assert len({str(dashes) for _, dashes in style.SERIES}) == len(style.SERIES)
