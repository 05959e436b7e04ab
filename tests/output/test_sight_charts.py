"""Pictures of a sightline must show what geometry and the transfer curve say, whatever is known."""

from __future__ import annotations

import io
from dataclasses import replace
from functools import cache
from xml.etree import ElementTree

import numpy as np
import pytest
from matplotlib.colors import to_rgba
from matplotlib.image import imread

from forecast.output.chart_layers import figure_bytes
from forecast.output.sight_charts import (
    save_sightline_figure,
    sight_alt_text,
    sightline_figure,
    sightline_phone_figure,
)
from forecast.output.sight_data import (
    AIR_NAMES,
    ENDS,
    PASSES,
    REACHES,
    angle_range,
    broken_curve,
    bulge,
    fan_fates,
    height_range,
    hidden_parts,
    picture_top,
    sightings,
    silhouette,
    target_rays,
    visible_parts,
)
from forecast.physics.transfer_curve import ARC_SECOND, straight_elevation
from tests.output.sight_build import CASES, HULL, WARM, A, case, make_view, unknown_view


@cache
def seen(name):
    return case(name)


@cache
def drawn(name, draw=sightline_figure):
    return draw(seen(name))


def rows_covered(view, air, offset, low, high, rows=8001):
    """Directions between two angles in which the target covers the view at one offset."""
    angle = np.linspace(low, high, rows)
    covered, _ = silhouette(view, air, angle, np.array([offset]))
    return angle[covered[:, 0]]


def panels(figure):
    """Axes by what they show: rays, three looks, transfer curve, lowest air."""
    axes = figure.axes
    rays = next(a for a in axes if a.get_xlabel().startswith("distance"))
    looks = [a for a in axes if a.images]
    curve = next(a for a in axes if a.get_xlabel().startswith("height at the target"))
    air = next((a for a in axes if a.get_xlabel().startswith("temperature")), None)
    return rays, looks, curve, air


@pytest.mark.parametrize("name", ["mountain", "near peak", "mirage over warm water"])
def test_in_straight_rays_the_top_stands_at_its_closed_form_elevation(name):
    view = seen(name)
    top = float(straight_elevation(view.observer_height, view.top, view.line.distance, A))
    offset = view.outline[np.argmax(view.outline[:, 1]), 0]
    low, high = angle_range(view)
    found = rows_covered(view, "straight", offset, low, high)
    # The step of the directions asked for; the curve itself is straight to far less.
    assert found.max() == pytest.approx(top, abs=2.0 * (high - low) / 8000)
    assert sightings(view, "straight", view.top)[0] == pytest.approx([top], abs=0.2 * ARC_SECOND)


def test_a_straight_silhouette_has_the_shape_of_its_outline():
    view = seen("mountain")
    low, high = angle_range(view)
    for offset in (-5e3, 1.2e3, 4e3):
        height = np.interp(offset, view.outline[:, 0], view.outline[:, 1])
        top = rows_covered(view, "straight", offset, low, high).max()
        there = float(straight_elevation(view.observer_height, height, view.line.distance, A))
        assert top == pytest.approx(there, abs=2.0 * (high - low) / 8000)
    beside = np.array([view.outline[0, 0] - 1.0, view.outline[-1, 0] + 1.0])
    assert not silhouette(view, "straight", np.linspace(low, high, 500), beside)[0].any()


def test_what_the_curve_of_the_earth_hides_is_missing_below():
    # Bottom of the silhouette = horizon: closed form of the dip, cos φ = a / (a + h).
    view = seen("near peak")
    dip = np.arccos(A / (A + view.observer_height))
    low, high = angle_range(view)
    angle = np.linspace(low, high, 8001)
    covered, ends = silhouette(view, "straight", angle, np.array([0.0]))
    assert angle[covered[:, 0]].min() == pytest.approx(-dip, abs=2.0 * (angle[1] - angle[0]))
    assert angle[ends].max() == pytest.approx(-dip, abs=2.0 * (angle[1] - angle[0]))
    assert not (covered[:, 0] & ends).any()


def test_an_inferior_mirage_shows_the_outline_twice_the_lower_one_inverted():
    # A wedge: the higher, the narrower. Upright, its width falls with the angle; inverted, it
    # grows; and both meet at the fold, the lowest height that can be seen.
    wedge = ((-10.0, 0.0), (0.0, 34.0), (10.0, 0.0))
    view = make_view(WARM, observer=5.0, top=34.0, distance=12e3, silhouette=wedge)
    low, high = angle_range(view)
    angle = np.linspace(low, high, 400)
    covered, _ = silhouette(view, "air", angle, np.linspace(-10.0, 10.0, 2001))
    width = covered.sum(axis=1)[covered.any(axis=1)]
    fold = int(width.argmax())
    assert 20 < fold < width.size - 20
    # In steps of 2: the air's layers, linear each, ripple the fold by a few centimetres.
    assert (np.diff(width[: fold + 1]) >= -4).all()
    assert (np.diff(width[fold:]) <= 4).all()
    assert width[0] < 0.6 * width[fold]
    # The same point is seen in two directions, the lower image upside down.
    upright = sightings(view, "air", 20.0)[1]
    assert list(upright) == [False, True]
    lit = view.visible[0, 0]
    assert sightings(view, "air", lit - 0.5)[0].size == 0
    # In standard air there is but one image.
    assert list(sightings(view, "standard", 20.0)[1]) == [True]


def test_curves_are_broken_at_jumps_and_where_rays_are_blocked():
    view = seen("superior mirage")
    angle, height = broken_curve(view, "air")
    good = np.isfinite(height[1:]) & np.isfinite(height[:-1])
    speed = np.abs(np.diff(height))[good] / np.diff(angle)[good]
    assert speed.max() <= 30.0 * view.line.distance
    # The ray that leaves the inversion and the one just held by it land far apart.
    whole = view.heights["air"]
    steps = np.abs(np.diff(whole)) / np.diff(view.elevation)
    assert np.nanmax(steps) > 30.0 * view.line.distance
    assert np.isnan(height).sum() > np.isnan(whole).sum()


def test_heights_over_the_line_between_the_ends_are_the_circle_s():
    # Sagitta of the arc over a chord of 40 km: a (1 − cos(D / 2a)), 31.4 m.
    view = seen("lamp over cold water")
    middle = bulge(view, np.array([0.0, 20e3, 40e3]))
    assert middle[[0, 2]] == pytest.approx([0.0, 0.0])
    assert middle[1] == pytest.approx(A * (1.0 - np.cos(20e3 / A)), rel=1e-5)
    # In vacuum a ray is straight in this frame.
    far = np.linspace(1e3, 40e3, 40)
    path = np.tan(1e-3) * far + 4.0 + far**2 / (2.0 * A)
    bend = np.diff(path + bulge(view, far), 2)
    assert np.abs(bend).max() < 1e-6


def test_rays_are_told_apart_by_what_becomes_of_them():
    view = seen("mirage over warm water")
    end, fate = view.fan_height[:, -1], fan_fates(view)
    assert (fate[np.isnan(end)] == ENDS).all()
    assert (fate[end > view.top] == PASSES).all()
    assert (fate[(end >= 0.0) & (end <= view.top)] == REACHES).all()
    assert set(fan_fates(seen("hidden"))) == {ENDS, PASSES}
    assert not target_rays(seen("hidden")).size


def test_the_ray_to_a_lamp_is_drawn_though_the_fan_misses_it():
    view = seen("lamp over cold water")
    assert not (fan_fates(view) == REACHES).any()
    ray = target_rays(view)
    assert ray[:, -1] == pytest.approx([36.0], abs=1.5)
    assert ray[:, 0] == pytest.approx([4.0])
    assert (ray > 0.0).all()
    assert picture_top(view) > (ray + bulge(view, view.fan_distance)).max()


def test_seen_and_hidden_parts_make_up_the_target():
    view = seen("superior mirage")
    parts = np.concatenate([visible_parts(view), hidden_parts(view)])
    assert (parts[:, 1] - parts[:, 0]).sum() == pytest.approx(view.top - view.base)
    assert hidden_parts(seen("hidden")).tolist() == [[0.0, 30.0]]
    assert visible_parts(seen("lamp over cold water")).tolist() == [[36.0, 36.0]]
    both = replace(view, visible=np.array([[-np.inf, 10.0], [40.0, np.inf]]))
    assert visible_parts(both).tolist() == [[0.0, 10.0], [40.0, 150.0]]
    assert hidden_parts(both).tolist() == [[10.0, 40.0]]


@pytest.mark.parametrize("name", CASES)
def test_all_that_is_seen_and_all_horizons_are_in_view(name):
    view = seen(name)
    low, high = angle_range(view)
    for air in AIR_NAMES:
        assert low < view.horizon[air] < high
        found = sightings(view, air, view.top)[0]
        assert ((found > low) & (found < high)).all()
    left, right = height_range(view)
    assert left <= view.base and right > view.top
    # Neither is lost in emptiness: the target or what hides it fills a good part.
    assert high - low < 2.0 * np.ptp([*view.horizon.values(), *_directions(view)]) + 2e-3
    assert right <= 1.25 * max(view.top, *(np.nanmin(h) for h in view.heights.values()))


def _directions(view):
    open_sky = [view.elevation[np.isfinite(h)][0] for h in view.heights.values()]
    return np.concatenate([open_sky, *(sightings(view, a, view.top)[0] for a in AIR_NAMES)])


@pytest.mark.parametrize("draw", [sightline_figure, sightline_phone_figure])
def test_panels_share_their_axes_and_say_their_units(draw):
    figure = drawn("mountain", draw)
    rays, looks, curve, air = panels(figure)
    assert len(looks) == 3
    assert len({(a.get_xlim(), a.get_ylim()) for a in looks}) == 1
    assert looks[0].get_ylim() == curve.get_ylim()
    assert "(km)" in rays.get_xlabel() and "(m)" in rays.get_ylabel()
    assert "arc minutes" in looks[0].get_ylabel()
    assert "across at the target" in looks[1].get_xlabel()
    assert air is not None
    # Three lines that differ in colour and in dash.
    lines = {line.get_gid(): line for line in curve.lines if line.get_gid()}
    assert len({str(line._unscaled_dash_pattern) for line in lines.values()}) == 3
    assert len({line.get_color() for line in lines.values()}) == 3


def test_ducts_are_shaded_along_the_water_and_in_the_lowest_air():
    duct = to_rgba("#f6d5ae")

    def shaded(name):
        rays, _, _, air = panels(drawn(name))
        bands = [c for c in rays.collections if np.allclose(c.get_facecolor()[0], duct)]
        spans = [p for p in air.patches if np.allclose(p.get_facecolor(), duct)]
        return bands, spans

    view = seen("lamp over cold water")
    bands, spans = shaded("lamp over cold water")
    assert len(bands) == len(spans) == len(view.ducts) == 1
    # The band follows the water: as thick in the middle as at the ends.
    heights = bands[0].get_paths()[0].vertices
    middle = heights[np.isclose(heights[:, 0], 20.0)][:, 1]
    assert np.ptp(middle) == pytest.approx(view.ducts[0, 1], rel=1e-6)
    assert shaded("hidden") == ([], [])


def test_land_that_blocks_is_drawn_and_named():
    view = seen("terrain")
    figure = drawn("terrain")
    rays, looks, _, _ = panels(figure)
    assert "land" in [t.get_text() for t in rays.get_legend().get_texts()]
    assert "24.0 km" in "".join(t.get_text() for t in figure.texts)
    # Where land ends the view nothing is filled, and the box says so.
    assert all((a.images[0].get_array() < 2).all() for a in looks)
    assert all("nothing of the" in a.texts[0].get_text() for a in looks)
    holes = replace(view, terrain=np.vstack([view.terrain, [[61e3, np.nan]]]))
    assert np.isfinite(picture_top(holes))


def test_a_lamp_is_a_dot_where_its_rays_come_from():
    view = seen("lamp over cold water")
    _, looks, _, _ = panels(drawn("lamp over cold water"))
    dots = [line for a in looks for line in a.lines if line.get_marker() == "o"]
    heights = [dot.get_ydata() for dot in dots]
    assert heights[0] == pytest.approx(sightings(view, "air", 36.0)[0] * 10800.0 / np.pi)
    assert [h.size for h in heights] == [1, 0, 0]
    said = ["nothing of the" in " ".join(t.get_text() for t in a.texts) for a in looks]
    assert said == [False, True, True]


def test_alternative_text_tells_state_chance_and_looks():
    text = sight_alt_text(seen("mirage over warm water"))
    for words in (
        "open in the best guess, 80 % likely to be open (62 % to 93 %)",
        "2031-05-02 16:00 UTC (2 May 18:00 local time (Europe/Oslo))",
        "12.0 km away",
        "This air: visible at -9.0′ to 5.4′, up to 2 images, 1 of them inverted",
    ):
        assert words in text
    hidden = sight_alt_text(seen("hidden"))
    assert "shut in the best guess, 0 %" in hidden
    assert hidden.count("nothing of the target visible") == 3
    assert "Layers that hold rays at heights of 0 to 12 m" in sight_alt_text(
        seen("lamp over cold water")
    )


def _nothing(view):
    return replace(
        view,
        elevation=np.zeros(0),
        heights={air: np.zeros(0) for air in AIR_NAMES},
        outline=np.zeros((0, 2)),
        fan_elevation=np.zeros(0),
        fan_distance=np.zeros(0),
        fan_height=np.zeros((0, 0)),
        words=(),
    )


UNKNOWN = {
    "all NaN": lambda: unknown_view(),
    "all empty": lambda: _nothing(unknown_view()),
    "no geometry": lambda: unknown_view(radius=np.nan, base=np.nan, top=np.nan),
    "no keys": lambda: unknown_view(heights={}, horizon={}, terrain=np.zeros((0, 2))),
    "a point": lambda: unknown_view(base=36.0),
}


@pytest.mark.parametrize(
    ("what", "draw"),
    [*((what, sightline_figure) for what in UNKNOWN), ("all NaN", sightline_phone_figure)],
)
def test_what_is_not_known_is_said_in_words(what, draw, recwarn):
    view = UNKNOWN[what]()
    figure = draw(view)
    picture = imread(io.BytesIO(figure_bytes(figure, "png")))
    said = " ".join(t.get_text() for a in figure.axes for t in a.texts)
    assert "not known" in said
    assert "nan" not in f"{said} {' '.join(t.get_text() for t in figure.texts)}".split()
    assert "not known whether it is open" in sight_alt_text(view)
    assert "nan" not in sight_alt_text(view)
    assert picture[..., :3].std() > 0.05
    assert not recwarn.list


def test_files_are_whole_and_the_same_for_the_same_view(tmp_path, recwarn):
    view = seen("mirage over warm water")
    # A formula to the drawing library, unless it is told that names are none.
    view = replace(view, line=replace(view.line, name="$\\frac{$"))
    made = [save_sightline_figure(tmp_path / f"ferry {i}.v1", view) for i in range(2)]
    assert made[0]["png"] == made[1]["png"]
    assert made[0]["svg"] == made[1]["svg"]
    assert made[0]["phone"] == made[1]["phone"]
    assert made[1]["file"] == "ferry 1.v1.svg"
    assert (tmp_path / "ferry 1.v1.svg").read_bytes() == made[1]["svg"]
    assert (tmp_path / "ferry 1.v1.png").read_bytes() == made[1]["png"]
    assert sorted(p.suffix for p in tmp_path.iterdir()) == [".png", ".png", ".svg", ".svg"]
    root = ElementTree.fromstring(made[0]["svg"])
    assert root.find("{http://www.w3.org/2000/svg}title").text == made[0]["alt"]
    assert len(made[0]["svg"]) < 600_000
    # Page: some 1,200 px; phone: 390 px at twice the dots, as the time–height charts.
    assert imread(io.BytesIO(made[0]["png"])).shape[1] == 1210
    assert imread(io.BytesIO(made[0]["phone"])).shape[1] == 774
    assert not recwarn.list


@pytest.mark.parametrize(
    "name", ["mast $\\frac{$ & co", "灯台 مَنارة קצה \N{OCTOPUS}", "W" * 300, "<b>\x1b[31m"]
)
def test_names_are_drawn_as_they_are(name, recwarn):
    view = seen("mirage over warm water")
    view = replace(
        view, line=replace(view.line, name=name), words=(f"{name} is seen $at$ last. " * 9,)
    )
    shown = "".join(ElementTree.fromstring(figure_bytes(sightline_figure(view), "svg")).itertext())
    assert (name if name.isprintable() else "\\x1b")[:80] in shown
    assert not recwarn.list


@pytest.mark.parametrize(
    ("name", "draw"),
    [
        *((n, sightline_figure) for n in CASES if n != "near peak"),
        ("near peak", sightline_phone_figure),
        ("superior mirage", sightline_phone_figure),
        ("terrain", sightline_phone_figure),
    ],
)
def test_no_words_lie_on_others_or_off_the_sheet(name, draw):
    figure = drawn(name, draw)
    figure.canvas.draw()
    renderer = figure.canvas.get_renderer()
    sheet = figure.bbox
    boxes = []
    for text in figure.findobj(lambda artist: hasattr(artist, "get_fontsize")):
        if text.get_visible() and text.get_text().strip():
            box = text.get_window_extent(renderer)
            # Ticks beyond the ends of an axis are kept by it but not drawn.
            if box.width and _shows(text, figure):
                boxes.append((text.get_text(), box.padded(-1.0)))
    for i, (words, box) in enumerate(boxes):
        assert box.x0 >= sheet.x0 and box.x1 <= sheet.x1, words
        assert box.y0 >= sheet.y0 and box.y1 <= sheet.y1, words
        for other, there in boxes[i + 1 :]:
            assert not box.overlaps(there), f"{words!r} lies on {other!r}"


def _shows(text, figure):
    ticks = {
        label: tick
        for a in figure.axes
        for axis in (a.xaxis, a.yaxis)
        for tick in [*axis.get_major_ticks(), *axis.get_minor_ticks()]
        for label in (tick.label1, tick.label2)
    }
    if text not in ticks:
        return True
    tick = ticks[text]
    low, high = sorted(
        tick.axes.get_xlim() if "XTick" in type(tick).__name__ else tick.axes.get_ylim()
    )
    return low <= tick.get_loc() <= high


def test_a_radio_line_is_not_said_to_be_looked_at():
    view = case("mirage over warm water", wave="radio", silhouette=HULL)
    titles = [t.get_text() for a in sightline_figure(view).axes for t in a.texts]
    assert "Directions its waves come from" in titles
    assert "How it would look" not in titles
