"""The page must be valid, self-contained and inert whatever stands in the data."""

from __future__ import annotations

import base64
import hashlib
import re
from html.parser import HTMLParser

import html5lib
import numpy as np
import pytest

from forecast.output.charts import draw_time_height, save_chart
from forecast.output.page import write_page
from forecast.output.phone_chart import phone_chart
from forecast.output.text import metres, percent
from forecast.schema import SIGHTLINE_STATES
from tests.output.conftest import HOSTILE


@pytest.fixture(scope="module")
def page(case, sights, tmp_path_factory):
    outlook, windows, chosen = case
    folder = tmp_path_factory.mktemp("page")
    sites = [(HOSTILE, "UTC"), ("cape", "Atlantic/Azores")]
    charts = {
        name: save_chart(draw_time_height(outlook, name, windows=windows), folder / f"c{i}")
        for i, (name, _) in enumerate(sites)
    }
    for name, zone in sites:
        charts[name]["phone"] = phone_chart(outlook, name, timezone=zone, windows=windows)

    def write(name="index.html", windows=windows):
        write_page(
            folder / name,
            outlook=outlook,
            windows=windows,
            charts=charts,
            sights=sights,
            settings_title=chosen.title,
            sites=sites,
            set_aside=[
                {"site": "cape", "file": HOSTILE, "reason": "cut <off>"},
                {"site": "cape", "file": "a\0\x1b[31m.nc", "reason": "bell\a and \u202eturn"},
            ],
            meta={
                "made_at": "2031-05-04T00:00:00Z",
                "version": "0",
                "warnings": [HOSTILE],
                "threshold": 0.5,
            },
        )
        return (folder / name).read_text(encoding="utf-8")

    return write


class Tags(HTMLParser):
    def __init__(self, text):
        super().__init__()
        self.tags = []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))


def test_html_is_valid(page):
    # Reference: html5lib in strict mode raises on any parse error of the HTML standard.
    html5lib.HTMLParser(strict=True).parse(page())


def test_nothing_is_loaded_from_anywhere(page):
    for tag, attrs in Tags(page()).tags:
        for key in ("src", "srcset", "data", "poster", "action"):
            assert attrs.get(key, "data:").startswith("data:"), (tag, attrs)
        if tag == "link":
            raise AssertionError("no linked resources")
        if tag == "a":
            assert not re.match(r"\w+:|//", attrs["href"])


def test_hostile_names_are_inert(page):
    text = page()
    scripts = [attrs for tag, attrs in Tags(text).tags if tag == "script"]
    assert len(scripts) == 1
    assert "<script>alert" not in text
    assert "<b>hill" not in text


def test_the_policy_names_exactly_the_pages_own_style_and_script(page):
    text = page()
    policy = re.search(r'Content-Security-Policy" content="([^"]+)"', text).group(1)
    assert "default-src 'none'" in policy
    for tag in ("style", "script"):
        body = re.search(rf"<{tag}>(.*?)</{tag}>", text, re.S).group(1)
        digest = base64.b64encode(hashlib.sha256(body.encode()).digest()).decode()
        assert f"{tag}-src 'sha256-{digest}'" in policy
    # Attribute styles would be refused by the policy.
    assert not any("style" in attrs for _, attrs in Tags(text).tags)


def test_ids_are_unique_and_charts_have_text(page):
    tags = Tags(page()).tags
    ids = [attrs["id"] for _, attrs in tags if "id" in attrs]
    assert len(ids) == len(set(ids))
    images = [attrs for tag, attrs in tags if tag == "img"]
    assert len(images) == 4  # two sites, and a view with where to stand
    assert all(len(attrs["alt"]) > 80 for attrs in images)
    for tag, attrs in tags:
        if "aria-labelledby" in attrs:
            assert attrs["aria-labelledby"] in ids
        if tag == "th":
            assert attrs.get("scope") in {"col", "row"}


def test_the_answer_comes_first_and_agrees_with_the_windows(page, case):
    _, windows, _ = case
    text = page()
    answer = re.search(r'<p class="answer">(.+?)</p>', text).group(1)
    assert windows[0].ahead
    assert answer.startswith("Best ahead: ")
    assert answer.endswith("<br>at cape")
    assert f"{windows[0].start:%H:%M}" in answer
    assert f"{100 * windows[0].probability:.0f} %" in answer
    assert text.index('class="answer"') < text.index("<table")
    for words in ("Never point optics near the Sun", "uncalibrated", "cut &lt;off&gt;"):
        assert words in text


def test_a_page_without_windows_says_so(page):
    assert "Nothing worth going for" in page("none.html", windows=[])


def test_a_narrow_screen_gets_its_own_chart(page, case):
    outlook, windows, _ = case
    sources = [attrs for tag, attrs in Tags(page()).tags if tag == "source"]
    assert len(sources) == 4
    assert all(int(a["height"]) > int(a["width"]) for a in sources)
    png = phone_chart(outlook, "cape", timezone="Atlantic/Azores", windows=windows)
    assert any(base64.b64encode(png).decode() in a["srcset"] for a in sources)


def test_same_content_same_bytes(page):
    assert page("a.html") == page("b.html")


def test_the_text_of_a_chart_is_not_hidden_by_a_link(page):
    # A link's own label would replace the text alternative of the picture inside it.
    inside = re.findall(r"<a [^>]*>(.*?)</a>", page(), re.S)
    assert inside
    assert not any("<img" in content for content in inside)


def test_columns_with_units_carry_plain_numbers_to_sort_by(page, case):
    # 9 km is written in metres, 10 km in kilometres: their texts do not sort.
    outlook, _, _ = case
    rows = re.findall(r'<tr><th scope="row">.*?</tr>', page(), re.S)
    keys = [re.findall(r'data-key="([^"]*)"', row) for row in rows if "data-key" in row]
    assert len(keys) == outlook.sizes["sightline"]
    for s, row in enumerate(keys):
        for key, name in zip(
            row, ("distance", "observer_height", "target_height", "hidden_height_straight"),
            strict=False,
        ):  # fmt: skip
            assert float(key) == pytest.approx(float(outlook[name].values[s]), rel=1e-5)


def test_sightlines_are_told_now_and_at_their_best_ahead(page, case):
    outlook, _, _ = case
    site, kind = outlook["site"].values, outlook["source_kind"].values
    ahead = np.flatnonzero((site == "cape") & (kind == "model"))
    latest = np.flatnonzero((site == "cape") & (kind == "ascent"))[-1]
    text = page()
    # The latest ascent of the case is at hour 54 of its start, 1 May 2031.
    assert "“Now” is the latest ascent, 2031-05-03 06:00 UTC" in text
    row = re.search(r'<tr><th scope="row">link</th>.*?</tr>', text, re.S).group(0)
    cells = re.findall(r"<td[^>]*>(.*?)</td>", row)
    states = {code: name for name, code in SIGHTLINE_STATES.items()}
    now = states[int(outlook["sightline_state"].values[latest, 0])]
    hidden = float(outlook["hidden_height"].values[latest, 0])
    assert cells[6] == f"{metres(hidden)}, {now}"
    best = outlook["sightline_probability"].values[ahead, 0].max()
    assert cells[8] == percent(float(best))
    assert cells[9] > "2031-05-03 06:00"


def test_control_characters_are_spelled_out(page):
    text = page()
    assert not re.search(r"[\0-\x08\x0b-\x1f\x7f\u202e]", text)
    assert r"\u202eturn" in text


def test_a_card_shows_one_sentence_and_unfolds_the_rest(page, case):
    text = page()
    tags = [tag for tag, _ in Tags(text).tags]
    assert tags.count("details") == tags.count("summary") > 0
    # Nothing of a reason is lost by the split.
    head, _, rest = case[1][0].reason.partition(". ")  # the first window has the first card
    assert head.split("(")[0].strip() in text
    assert rest.rsplit(";", 1)[-1].strip() in text
