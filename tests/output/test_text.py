"""Words made of numbers must say each thing once and nothing that is not known."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

from forecast.outlook import Window
from forecast.output.text import answer_lines, metres, percent, time_span, zone_name

START = datetime(2031, 5, 1, 22, tzinfo=UTC)
WINDOW = Window(
    "cape", "sightline", "far hill", START, START + timedelta(hours=6),
    START + timedelta(hours=3), 0.834, 0.71, 0.912, 7, "why", True,
)  # fmt: skip


def test_the_answer_says_what_how_likely_how_sure_and_when_on_both_clocks():
    # Lisbon keeps UTC+1 in May.
    what, when = answer_lines([WINDOW], ZoneInfo("Europe/Lisbon"))
    assert what == "Best ahead: far hill, 83 % likely (71 % to 91 %)"
    assert when == (
        "1 May 22:00 to 2 May 04:00 UTC, likeliest at 2 May 01:00 UTC, 2 May 02:00 local time"
    )


def test_nothing_is_said_twice():
    lone = replace(WINDOW, end=START, best_time=START)
    assert answer_lines([lone], ZoneInfo("UTC"))[1] == "1 May 22:00 UTC"
    assert zone_name(ZoneInfo("UTC")) == "UTC"
    assert time_span(START, START + timedelta(hours=1), UTC) == "1 May 22:00 to 23:00"


def test_what_lies_behind_is_not_sold_as_ahead():
    assert answer_lines([replace(WINDOW, ahead=False)], UTC)[0].startswith("Nothing ahead.")
    assert answer_lines([], UTC) == ("Nothing worth going for in the times covered.", "")


def test_unknown_numbers_are_dashes():
    assert percent(float("nan")) == metres(float("nan")) == "–"
    assert metres(9999.4) == "9999 m"
    assert metres(10e3) == "10.0 km"
