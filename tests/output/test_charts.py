"""What a chart draws must be what the outlook says; drawn twice it must be the same bytes."""

from __future__ import annotations

import io

import numpy as np
import pytest
from matplotlib.image import imread

from forecast.output.chart_data import column_edges, time_height
from forecast.output.charts import draw_time_height, save_chart
from tests.output.conftest import HOSTILE


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


def test_a_chart_is_not_blank_and_reads_in_grey(case, tmp_path):
    outlook, windows, _ = case
    made = save_chart(draw_time_height(outlook, "cape", windows=windows), tmp_path / "c")
    grey = imread(io.BytesIO(made["png"]))[..., :3] @ np.array([0.299, 0.587, 0.114])
    # Trapping layers are the darkest colours of the map: they must differ from standard air by
    # far more than a shade.
    from matplotlib import colormaps

    luminance = lambda x: np.dot(colormaps["cividis"](x)[:3], [0.299, 0.587, 0.114])  # noqa: E731
    trapped, standard = luminance(150 / 410 * 0.5), luminance((118 + 150) / 410)
    assert standard - trapped > 0.25
    assert grey.std() > 0.1


def test_alternative_text_says_what_the_chart_shows(case, tmp_path):
    outlook, windows, _ = case
    made = save_chart(draw_time_height(outlook, "cape", windows=windows), tmp_path / "c")
    assert "9 ascents and 12 model profiles" in made["alt"]
    best = float(np.nanmax(outlook["sightline_probability"].values[:, 0]))
    assert f"link: at most {100 * best:.0f} %" in made["alt"]


@pytest.mark.parametrize("rows", [[0], [0, 1]])
def test_one_or_two_profiles_are_enough(case, tmp_path, rows):
    outlook, _, _ = case
    some = outlook.isel(profile=np.flatnonzero(outlook["site"].values == "cape")[rows])
    made = save_chart(draw_time_height(some, "cape", top=1000.0, low_stretch=True), tmp_path / "c")
    assert made["png"].startswith(b"\x89PNG")


def test_an_unknown_site_is_a_clear_error(case):
    with pytest.raises(ValueError, match="no profile of site 'nowhere'"):
        time_height(case[0], "nowhere", 3000.0)
