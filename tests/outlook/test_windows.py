"""Windows must be exactly the runs over the threshold, ranked, with reasons that quote the data."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import numpy as np

from forecast.outlook import find_windows, make_outlook
from tests.outlook.build import air, line, profiles, settings

T0 = datetime(2031, 5, 1, tzinfo=UTC)


def outlook_with(chances, hours=None, **changes):
    """Build an outlook whose duct-under-1-km and sightline probabilities are overwritten."""
    hours = hours if hours is not None else [6 * i for i in range(len(chances))]
    data = profiles([{"air": air(inversion=500.0), "hours": h} for h in hours])
    outlook = make_outlook(data, settings(sightlines=(line(),), members=8))
    for name in ("sightline_probability", "duct_probability"):
        for suffix in ("", "_lower", "_upper"):
            outlook[name + suffix][:] = 0.0
    for suffix in ("", "_lower", "_upper"):
        outlook["sightline_probability" + suffix][:, 0] = chances
    return outlook


def spans(windows):
    return [(w.start - T0, w.end - T0) for w in windows]


def hours(*pairs):
    return [(timedelta(hours=a), timedelta(hours=b)) for a, b in pairs]


def test_runs_over_the_threshold_and_nothing_else():
    outlook = outlook_with([0.1, 0.5, 0.9, 0.49, 0.7, np.nan, 0.8])
    windows = find_windows(outlook, settings())
    assert sorted(spans(windows)) == hours((6, 12), (24, 24), (36, 36))
    best = windows[0]
    assert best.probability == 0.9
    assert best.best_time - T0 == timedelta(hours=12)
    assert best.valid_times == 2
    assert [w.probability for w in windows] == [0.9, 0.8, 0.7]


def test_a_pause_in_the_data_ends_a_window():
    outlook = outlook_with([0.9] * 6, hours=[0, 6, 12, 30, 36, 42])
    assert spans(find_windows(outlook, settings())) == hours((0, 12), (30, 42))


def test_ascents_every_six_hours_then_hourly_model_times_are_no_pause():
    outlook = outlook_with([0.9] * 6, hours=[0, 6, 12, 18, 19, 20])
    assert spans(find_windows(outlook, settings())) == hours((0, 20))


def test_sightlines_come_first_and_a_higher_ceiling_adds_nothing():
    outlook = outlook_with([0.6, 0.6])
    for suffix in ("", "_lower", "_upper"):
        outlook["duct_probability" + suffix][:, 1:] = 0.95
    windows = find_windows(outlook, settings())
    assert [(w.kind, w.subject) for w in windows] == [
        ("sightline", "link"),
        ("duct", "duct under 1 km"),
    ]


def test_reasons_quote_the_numbers_of_the_best_time():
    data = profiles([{"air": air(inversion=40.0)}])
    outlook = make_outlook(data, settings(sightlines=(line(wave="optical"),)))
    for suffix in ("", "_lower", "_upper"):
        outlook["sightline_probability" + suffix][:] = 0.9
    windows = find_windows(outlook, settings())
    reason = windows[0].reason
    hidden = float(outlook["hidden_height"].values[0, 0])
    standard = float(outlook["hidden_height_standard"].values[0])
    assert f"The lowest {hidden:.0f} m are hidden" in reason
    assert f"against {standard:.0f} m in standard air" in reason
    warming = float(outlook["near_ground_warming"].values[0])
    assert f"Air warms by {warming:.1f} K in the lowest 100 m" in reason
    strongest = int(np.nanargmax(outlook["duct_strength"].values[0]))
    top = outlook["duct_top"].values[0, strongest]
    duct = next(w for w in windows if w.kind == "duct")
    assert f"to {top:.0f} m" in duct.reason
    assert "lowest level at 0 m, then one every 20 m" in duct.reason
    assert "nan" not in (reason + duct.reason).lower()


def test_what_lies_ahead_of_the_latest_ascent_comes_first():
    rows = [{"air": air(inversion=500.0)}]
    rows += [
        {"air": air(inversion=500.0), "hours": h, "kind": "model", "lead": h} for h in (12, 18)
    ]
    outlook = make_outlook(profiles(rows), settings(sightlines=(line(),), members=8))
    for suffix in ("", "_lower", "_upper"):
        outlook["sightline_probability" + suffix][:, 0] = [0.9, 0.1, 0.6]
        outlook["duct_probability" + suffix][:] = 0.0
    windows = find_windows(outlook, settings())
    assert [(w.probability, w.ahead) for w in windows] == [(0.6, True), (0.9, False)]


def test_the_best_time_of_a_window_that_has_begun_lies_ahead():
    rows = [{"air": air(inversion=500.0)}]
    rows += [{"air": air(inversion=500.0), "hours": h, "kind": "model", "lead": h} for h in (6, 12)]
    outlook = make_outlook(profiles(rows), settings(sightlines=(line(),), members=8))
    for suffix in ("", "_lower", "_upper"):
        outlook["sightline_probability" + suffix][:, 0] = [0.9, 0.6, 0.7]
        outlook["duct_probability" + suffix][:] = 0.0
    (window,) = find_windows(outlook, settings())
    assert window.ahead
    assert window.start == T0
    assert (window.best_time - T0, window.probability) == (timedelta(hours=12), 0.7)


def test_no_run_no_window():
    assert find_windows(outlook_with([0.1, 0.2]), settings()) == []
