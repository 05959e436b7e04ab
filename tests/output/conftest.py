"""One small outlook with everything the output stage must cope with."""

from __future__ import annotations

import pytest

from forecast.outlook import find_windows, make_outlook
from forecast.outlook.speaking import speaking_profiles
from forecast.outlook.viewing import window_views
from forecast.products import make_pictures
from tests.outlook.build import air, line, profiles, settings

HOSTILE = '<script>alert("x")</script>&../..\\'


def case_profiles():
    """Profiles of two sites, ascents then model rows, a gap, a hostile name."""
    rows = [
        {"air": air(inversion=40.0 if 3 <= i <= 6 else 700.0), "hours": 6 * i}
        for i in range(10)
        if i != 7
    ]
    rows += [
        {"air": air(inversion=60.0 if i > 8 else None), "hours": 57 + i, "kind": "model", "lead": i}
        for i in range(1, 13)
    ]
    rows += [{"air": air(top=1200.0), "hours": 6 * i, "site": HOSTILE} for i in range(3)]
    return profiles(rows)


@pytest.fixture(scope="session")
def case():
    """Outlook, windows and settings of `case_profiles`."""
    lines = (line(), line(name="=far & <b>hill</b>", wave="optical", target_height=60.0))
    chosen = settings(sightlines=lines, members=16, title="Test coast")
    outlook = make_outlook(case_profiles(), chosen)
    return outlook, find_windows(outlook, chosen), chosen


@pytest.fixture(scope="session")
def sights(case, tmp_path_factory):
    """What the page shows of the sightlines' windows."""
    outlook, windows, chosen = case
    told = speaking_profiles(case_profiles(), chosen)
    views = window_views(told, outlook, windows, chosen)
    assert views, "the case must have a sightline's window"
    return make_pictures(outlook, views, tmp_path_factory.mktemp("sights"), lambda *_: None, set())
