"""What a chart draws must be what the outlook says; drawn twice it must be the same bytes."""

from __future__ import annotations

import io
from dataclasses import replace
from xml.etree import ElementTree

import numpy as np
import pytest
from matplotlib.colors import Normalize
from matplotlib.dates import date2num
from matplotlib.figure import Figure
from matplotlib.image import imread

from forecast.output.chart_data import best_profile, column_edges, time_height
from forecast.output.chart_layers import draw_likelihood
from forecast.output.charts import draw_time_height, save_chart
from forecast.output.colours import GRADIENT_RANGE, gradient_colours
from forecast.output.phone_chart import phone_chart
from tests.output.conftest import HOSTILE

LUMA = np.array([0.299, 0.587, 0.114])  # weights of a grey print, Rec. ITU-R BT.601


def seconds(*hours):
    return np.datetime64("2031-05-01", "s") + (np.array(hours) * 3600).astype("m8[s]")


def test_chart_numbers_are_the_outlooks(case):
    outlook, _, _ = case
    data = time_height(outlook, "cape", 3000.0)
    rows = np.flatnonzero(outlook["site"].values == "cape")
    assert (data.rows == rows).all()
    np.testing.assert_array_equal(
        data.likelihood, outlook["duct_likelihood"].values[rows][:, : data.bins.size]
    )
    # Each row of the picture shows dM/dz of the native layer around it.
    middle = 0.5 * (data.edges[1:] + data.edges[:-1])
    for i in (0, 4, len(rows) - 1):
        z = outlook["height"].values[rows[i]]
        m = outlook["modified_refractivity"].values[rows[i]]
        for k in (1, 7, 200, 400):
            below = np.flatnonzero(z <= middle[k])[-1]
            slope = 1e3 * (m[below + 1] - m[below]) / (z[below + 1] - z[below])
            assert data.gradient[i, k] == pytest.approx(slope, abs=1e-6)
    labels = [s.label for s in data.strips]
    assert labels[:2] == ["link", "=far & <b>hill</b>"]
    np.testing.assert_array_equal(
        data.strips[0].probability, outlook["sightline_probability"].values[rows, 0]
    )


def test_nothing_is_drawn_above_a_profile_cut_short(case):
    outlook, _, _ = case
    data = time_height(outlook, HOSTILE, 3000.0)
    middle = 0.5 * (data.edges[1:] + data.edges[:-1])
    assert np.isnan(data.gradient[:, middle > 1210.0]).all()
    assert np.isfinite(data.gradient[:, middle < 1190.0]).all()


def test_columns_meet_half_way_and_leave_gaps_open():
    left, right = column_edges(seconds(0, 6, 12, 24, 30))
    assert (right[:2] == left[1:3]).all()
    # 12 h without an ascent: neither neighbour is smeared over it.
    assert right[2] == seconds(15)[()]
    assert left[3] == seconds(21)[()]


def test_ascents_missing_on_both_sides_leave_two_gaps():
    # The usual step is 6 h however many of its neighbours are missing too.
    left, right = column_edges(seconds(0, 6, 12, 24, 36, 42, 48))
    assert right[3] - left[3] == np.timedelta64(6, "h")
    assert (left[[3, 4]] > right[[2, 3]]).all()


def test_hourly_then_three_hourly_model_times_leave_no_gap():
    left, right = column_edges(seconds(*range(12), *range(12, 40, 3)))
    assert (right[:-1] == left[1:]).all()


def test_no_profile_stands_for_more_than_a_day():
    left, right = column_edges(seconds(0, 24 * 7, 24 * 14))
    assert (right - left == np.timedelta64(24, "h")).all()


def test_a_level_without_refractivity_leaves_no_hole(case):
    outlook = case[0].isel(profile=case[0]["site"].values == "cape").copy(deep=True)
    # The gradient of a level is that to the next one with a refractivity (schema).
    outlook["refractivity"][0, 5] = np.nan
    outlook["refractivity_gradient"][0, 5] = np.nan
    data = time_height(outlook, "cape", 3000.0)
    middle = 0.5 * (data.edges[1:] + data.edges[:-1])
    z = outlook["height"].values[0]
    hole = (middle > z[4]) & (middle < z[6])
    steepness = outlook["refractivity_gradient"].values[0, 4] + 1e9 / float(
        outlook["earth_radius"][0]
    )
    np.testing.assert_allclose(data.gradient[0, hole], steepness)


def test_day_and_night_are_not_told_where_the_place_is_unknown(case):
    outlook = case[0].isel(profile=case[0]["site"].values == "cape").copy(deep=True)
    assert set(time_height(outlook, "cape", 3000.0).light) == {0, 1, 2}
    outlook["latitude"][:] = np.nan
    assert set(time_height(outlook, "cape", 3000.0).light) == {-1}


def test_the_time_named_for_a_strip_lies_ahead(case):
    data = time_height(case[0], "cape", 3000.0)
    strip = data.strips[-1]
    # Past ascents were surer; the planner is told of the forecast.
    assert np.nanmax(strip.probability[data.ascent]) >= np.nanmax(strip.probability[~data.ascent])
    best = best_profile(data, strip)
    assert data.ahead[best]
    assert strip.probability[best] == np.nanmax(strip.probability[data.ahead])
    past = replace(data, ahead=np.zeros_like(data.ahead))
    assert strip.probability[best_profile(past, strip)] == np.nanmax(strip.probability)
    unknown = replace(strip, probability=np.full_like(strip.probability, np.nan))
    assert best_profile(data, unknown) is None


def test_change_from_six_hourly_to_hourly_is_no_gap():
    left, right = column_edges(seconds(0, 6, 12, 18, 19, 20))
    assert (right[:-1] == left[1:]).all()


def test_a_lone_profile_has_a_width():
    left, right = column_edges(seconds(3))
    assert (right - left).astype(int) == 6 * 3600


@pytest.mark.parametrize("site", ["cape", HOSTILE])
def test_same_chart_same_bytes(case, tmp_path, site):
    outlook, windows, _ = case
    made = [
        save_chart(draw_time_height(outlook, site, windows=windows), tmp_path / f"chart{i}")
        for i in range(2)
    ]
    assert made[0]["png"] == made[1]["png"]
    assert made[0]["svg"] == made[1]["svg"]
    assert (tmp_path / "chart1.png").read_bytes() == made[1]["png"]
    assert len(made[0]["svg"]) < 1_500_000


def test_a_chart_is_not_blank(case, tmp_path):
    outlook, windows, _ = case
    made = save_chart(draw_time_height(outlook, "cape", windows=windows), tmp_path / "c")
    grey = imread(io.BytesIO(made["png"]))[..., :3] @ LUMA
    assert grey.std() > 0.1


def test_trapping_layers_stand_out_in_grey():
    colours = gradient_colours()(Normalize(*GRADIENT_RANGE)(np.arange(-149.5, 260.0)))[:, :3]
    grey = colours @ LUMA
    # Lighter all the way, so that lightness alone tells the gradient; a leap at 0.
    assert (np.diff(grey) > -0.002).all()
    assert grey[150] - grey[149] > 0.2
    assert np.diff(grey).max() == grey[150] - grey[149]


def test_any_figure_can_be_saved(tmp_path):
    # One drawn elsewhere has no text alternative.
    made = save_chart(Figure(), tmp_path / "c")
    assert made["alt"] == ""
    assert b"<title>" not in made["svg"]


def test_outlines_end_at_gaps(case):
    outlook, _, _ = case
    data = time_height(outlook, "cape", 3000.0)
    gap = int(np.flatnonzero(data.left[1:] > data.right[:-1])[0])
    # A duct on both sides of the gap.
    duct = np.where(data.bins < 500.0, 0.95, 0.0)
    data = replace(data, likelihood=np.tile(duct, (data.time.size, 1)))
    axis = Figure().add_subplot()
    draw_likelihood(axis, data)
    x = np.concatenate([path.vertices[:, 0] for path in axis.collections[0].get_paths()])
    ends = date2num(data.right[gap]), date2num(data.left[gap + 1])
    assert not ((x > ends[0] + 1e-6) & (x < ends[1] - 1e-6)).any()
    # And there are outlines along both edges.
    assert all(np.abs(x - end).min() < 1e-6 for end in ends)


def test_answer_on_the_chart_says_whether_it_lies_ahead(case, tmp_path):
    outlook, windows, _ = case
    past = [w for w in windows if not w.ahead and w.site == "cape"]
    for chosen, words in ((windows, "Best ahead: "), (past, "Nothing ahead. Best of late: ")):
        svg = save_chart(draw_time_height(outlook, "cape", windows=chosen), tmp_path / "c")["svg"]
        assert words in svg.decode()


def test_alternative_text_says_what_the_chart_shows(case, tmp_path):
    outlook, windows, _ = case
    made = save_chart(draw_time_height(outlook, "cape", windows=windows), tmp_path / "c")
    assert "9 ascents and 12 model profiles" in made["alt"]
    best = float(np.nanmax(outlook["sightline_probability"].values[:, 0]))
    assert f"link: at most {100 * best:.0f} %" in made["alt"]
    sure = outlook["duct_likelihood"].values[outlook["site"].values == "cape"] >= 0.9
    assert (
        f"In {sure.any(axis=1).sum()} of 21 profiles 90 % of members agree on a duct" in made["alt"]
    )


def test_svg_carries_the_text_and_nothing_that_runs(case, tmp_path):
    outlook, windows, _ = case
    made = save_chart(draw_time_height(outlook, HOSTILE, windows=windows), tmp_path / "c")
    root = ElementTree.fromstring(made["svg"])
    tags = {element.tag.rpartition("}")[2] for element in root.iter()}
    assert "script" not in tags
    assert root.find("{http://www.w3.org/2000/svg}title").text == made["alt"]
    assert "alert" in made["alt"]
    # Not one address of the outside world but the names of the formats.
    assert not any("http" in v for e in root.iter() for k, v in e.attrib.items() if "href" in k)


@pytest.mark.parametrize("rows", [[0], [0, 1]])
def test_one_or_two_profiles_are_enough(case, tmp_path, rows):
    outlook, _, _ = case
    some = outlook.isel(profile=np.flatnonzero(outlook["site"].values == "cape")[rows])
    made = save_chart(draw_time_height(some, "cape", top=1000.0, low_stretch=True), tmp_path / "c")
    assert made["png"].startswith(b"\x89PNG")


def test_an_unknown_site_is_a_clear_error(case):
    with pytest.raises(ValueError, match="no profile of site 'nowhere'"):
        time_height(case[0], "nowhere", 3000.0)


@pytest.mark.parametrize("name", ["mast $\\frac{$ & co", "$x$", "灯台 \N{OCTOPUS}"])
def test_names_are_drawn_as_they_are(case, tmp_path, name, recwarn):
    # Between dollar signs stands a formula for the drawing library; names are none.
    outlook = case[0].isel(profile=case[0]["site"].values == "cape").copy()
    outlook["sightline_name"] = ("sightline", np.array([name, "other"]))
    made = save_chart(draw_time_height(outlook, "cape"), tmp_path / "c")
    phone_chart(outlook, "cape")
    assert name.replace("&", "&amp;") in made["svg"].decode()
    # A letter that the font lacks is no news for the log of every night.
    assert not recwarn.list
