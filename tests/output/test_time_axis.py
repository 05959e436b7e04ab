"""Ticks must stand at round hours of the zone they are read in, also when clocks change."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

from hypothesis import given
from hypothesis import strategies as st

from forecast.output.time_axis import time_ticks

LISBON = ZoneInfo("Europe/Lisbon")


def test_days_are_named_once():
    start = datetime(2031, 5, 1, 9, tzinfo=UTC)
    labels = [label for _, label in time_ticks(start, start + timedelta(hours=40), UTC, 8)]
    assert labels == ["12:00\n1 May", "18:00", "2 May", "06:00", "12:00", "18:00", "3 May"]


def test_ticks_keep_to_the_clock_when_it_changes():
    # The European Union's clocks go from 01:00 to 02:00 UTC+1 on the last Sunday of March
    # (Directive 2000/84/EC): 30 March 2031.
    start = datetime(2031, 3, 29, tzinfo=UTC)
    ticks = time_ticks(start, start + timedelta(days=3), LISBON, 8)
    assert [t.hour for t, _ in ticks] == [0, 12, 0, 11, 23, 11, 23]
    assert all(t.astimezone(LISBON).hour in (0, 12) for t, _ in ticks)


def test_an_hour_that_the_clock_skips_has_no_tick():
    start = datetime(2031, 3, 30, tzinfo=UTC)
    labels = [label for _, label in time_ticks(start, start + timedelta(hours=4), LISBON, 8)]
    assert labels == ["30 Mar", "02:00", "03:00", "04:00", "05:00"]


@given(
    st.datetimes(datetime(1990, 1, 1), datetime(2090, 1, 1)),
    st.floats(1.0, 24.0 * 800.0),
    st.sampled_from(["UTC", "Australia/Lord_Howe", "America/St_Johns", "Pacific/Apia"]),
    st.integers(4, 13),
)
def test_ticks_rise_inside_the_axis_and_are_few(start, hours, key, most):
    zone = ZoneInfo(key)
    start = start.replace(tzinfo=UTC)
    end = start + timedelta(hours=hours)
    times = [t for t, _ in time_ticks(start, end, zone, most)]
    assert times == sorted(set(times))
    assert all(start <= t <= end for t in times)
    # One more fits where both ends of a span lie on ticks, two where a clock goes back.
    assert len(times) <= most + 2


@given(st.floats(24.0 * 30.0, 24.0 * 300.0))
def test_two_zones_show_the_same_days(hours):
    start = datetime(2031, 5, 1, tzinfo=UTC)
    end = start + timedelta(hours=hours)
    here, there = (
        {label for _, label in time_ticks(start, end, zone, 12)}
        for zone in (UTC, ZoneInfo("Pacific/Auckland"))
    )
    assert len(here ^ there) <= 2  # at the ends
