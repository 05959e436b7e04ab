"""The chart of where to stand must show what the outlook says, in any case the outlook can have."""

from __future__ import annotations

import io

import numpy as np
import pytest
from matplotlib.colors import LinearSegmentedColormap, to_rgb
from matplotlib.image import imread

from forecast.outlook.stand import StandShares, stand_geometry
from forecast.outlook.stand_choice import known_from, stand_statistics, stand_words
from forecast.output.chart_data import time_height
from forecast.output.stand_chart import _ODDS_COLOURS, save_stand_chart, stand_chart
from forecast.output.stand_odds import stand_odds
from forecast.schema import CAUTION, SURFACE_STATES
from forecast.settings import Place
from tests.outlook.build import line

HOSTILE = '<b>"cliff"</b> $x^2$ &'
HEIGHTS = (0.5, 2.0, 10.0, 40.0)
LUMA = np.array([0.299, 0.587, 0.114])  # weights of a grey print, Rec. ITU-R BT.601


def _with_stands(outlook, chance=None, state=None, places=True):
    """The small outlook with odds by height; two sightlines, one without places."""
    rows = outlook.sizes["profile"]
    site = outlook["site"].values.astype(str)
    rng = np.random.default_rng(6)
    spots = (Place(HOSTILE, 3.0, 55e3), Place("pier", 0.0, 61e3)) if places else ()
    lines = [line(stand_heights=HEIGHTS, places=spots), line(name="far", stand_heights=(1.0, 5.0))]
    if chance is None:
        chance = np.round(rng.uniform(0.0, 1.0, (rows, 2, 4)) * 16.0) / 16.0
    chance = np.array(np.broadcast_to(chance, (rows, 2, 4)), dtype=float)
    chance[site != "cape"] = np.nan
    chance[:, 1, 2:] = np.nan
    at = np.repeat(chance[:, :, None, :], len(spots), axis=2) * 0.5
    at[:, 1] = np.nan
    judged = np.full((rows, 2), 16.0)
    shares = StandShares(chance, 9.0 * chance, chance, at, at, judged, judged)
    out = outlook.copy()
    if state is not None:
        out["surface_layer_state"] = ("profile", np.full(rows, SURFACE_STATES[state]))
        out["lowest_level"] = ("profile", np.full(rows, 5.0))
    known = known_from(out["surface_layer_state"].values, out["lowest_level"].values)
    new = {**stand_geometry(lines), **stand_statistics(lines, shares, np.full(rows, 12.0), known)}
    return out.assign(new)


@pytest.fixture
def outlook(case):
    return _with_stands(case[0])


def test_odds_shown_are_the_outlooks(outlook):
    data = time_height(outlook, "cape", 300.0)
    odds = stand_odds(outlook, 0, data)
    assert odds.heights.tolist() == list(HEIGHTS)
    np.testing.assert_array_equal(odds.chance, outlook["stand_probability"].values[data.rows, 0])
    best = outlook["best_stand_height"].values[data.rows, 0]
    assert odds.heights[odds.best].tolist() == best.tolist()
    row, stand = odds.named
    ahead = odds.chance[data.ahead]
    assert data.ahead[row] and odds.chance[row, stand] == ahead.max()
    # Only the heights of the sightline itself: the second has two.
    assert stand_odds(outlook, 1, data).heights.tolist() == [1.0, 5.0]


def test_places_are_shown_at_their_best_ahead(outlook):
    data = time_height(outlook, "cape", 300.0)
    odds = stand_odds(outlook, 0, data)
    ahead = data.rows[data.ahead]
    values = outlook["place_probability"].values[ahead, 0]
    assert [p.name for p in odds.places] == [HOSTILE, "pier"]  # equal odds: as listed
    assert odds.places[1].chance == values[:, 1].max()
    assert odds.places[1].height in HEIGHTS
    assert odds.places[1].chance == values[:, 1, HEIGHTS.index(odds.places[1].height)].max()
    assert stand_odds(outlook, 1, data).places == []


def test_heights_that_are_not_known_are_hatched_and_not_shown(case):
    data = _with_stands(case[0], state="unknown")
    odds = stand_odds(data, 0, time_height(data, "cape", 300.0))
    assert np.isnan(odds.chance[:, :2]).all() and np.isfinite(odds.chance[:, 2:]).all()
    figure = stand_chart(data, 0)
    hatched = [c for c in figure.axes[0].collections if c.get_hatch()]
    tops = [path.vertices[:, 1].max() for c in hatched for path in c.get_paths()]
    assert tops == [2.0] * odds.chance.shape[0]
    assert "Heights below 5 m are not known" in figure.text_alternative


def test_lightness_alone_tells_the_odds():
    """For grey prints and any eye: darker with the odds, in about equal steps."""
    grey = np.array([to_rgb(c) for c in _ODDS_COLOURS]) @ LUMA
    steps = -np.diff(grey)
    assert steps.min() > 0.0
    assert steps.max() < 1.5 * steps.min()
    assert grey[0] - grey[-1] > 0.5


def test_the_map_is_coloured_by_the_odds(outlook):
    figure = stand_chart(outlook, 0)
    odds = stand_odds(outlook, 0, time_height(outlook, "cape", 300.0))
    mesh = figure.axes[0].collections[0]
    np.testing.assert_array_equal(np.ma.filled(mesh.get_array(), np.nan)[:, 0::2], odds.chance.T)
    # Colour bar: 0 to 100 %, whatever the odds of the day.
    assert mesh.get_clim() == (0.0, 1.0)
    assert isinstance(mesh.get_cmap(), LinearSegmentedColormap)


@pytest.mark.parametrize("phone", [False, True])
def test_chart_says_answer_caution_and_names_as_they_are(outlook, phone):
    figure = stand_chart(outlook, 0, timezone="Atlantic/Azores", phone=phone)
    texts = [t for axis in figure.axes for t in axis.texts]
    written = " ".join(t.get_text() for t in [*figure.texts, *texts])
    assert " ".join(CAUTION.split()) in " ".join(written.split())
    answer = stand_words(outlook, 0).partition(";")[0]
    assert answer in " ".join(written.split())
    assert "observer, 20 m" in written
    assert "local time" in written
    assert '<b>"cliff"</b>' in written
    assert all(not t.get_parse_math() for t in texts if "cliff" in t.get_text())
    for part in (stand_words(outlook, 0), HOSTILE, "pier", "0.5 to 40 m"):
        assert part in figure.text_alternative


def test_same_chart_same_bytes_and_not_blank(outlook, tmp_path):
    made = [save_stand_chart(tmp_path / f"s{i}", outlook, 0) for i in range(2)]
    for kind in ("png", "svg", "phone"):
        assert made[0][kind] == made[1][kind]
    assert made[0]["file"] == "s0.svg"
    assert (tmp_path / "s1.png").read_bytes() == made[1]["png"]
    assert made[0]["alt"].startswith("Odds of")
    wide, narrow = (imread(io.BytesIO(made[0][kind])) for kind in ("png", "phone"))
    assert (wide[..., :3] @ LUMA).std() > 0.1
    assert narrow.shape[1] == round(4.3 * 180)


@pytest.mark.parametrize("phone", [False, True])
@pytest.mark.parametrize(
    ("chance", "words"), [(0.0, "Never open from any height"), (np.nan, "No height can be judged")]
)
def test_nothing_to_name_is_said_and_not_marked(case, chance, words, phone):
    data = _with_stands(case[0], chance=chance)
    figure = stand_chart(data, 0, phone=phone)
    assert words in figure.text_alternative
    odds = stand_odds(data, 0, time_height(data, "cape", 300.0))
    assert odds.named is None and (odds.best == -1).all()
    assert not any(" from " in t.get_text() for t in figure.axes[0].texts)


def test_one_valid_time_and_no_places_are_enough(case, tmp_path):
    data = _with_stands(case[0], places=False)
    assert "place_name" not in data
    lone = data.isel(profile=np.flatnonzero(data["site"].values.astype(str) == "cape")[:1])
    assert save_stand_chart(tmp_path / "lone", lone, 0)["png"].startswith(b"\x89PNG")


def test_a_sightline_without_profiles_is_a_clear_error(outlook):
    rest = outlook.isel(profile=np.flatnonzero(outlook["site"].values.astype(str) != "cape"))
    with pytest.raises(ValueError, match="no profile of site 'cape'"):
        stand_chart(rest, 0)
