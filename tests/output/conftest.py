"""One small outlook with everything the output stage must cope with."""

from __future__ import annotations

import pytest

from forecast.outlook import find_windows, make_outlook
from tests.outlook.build import air, line, profiles, settings

HOSTILE = '<script>alert("x")</script>&../..\\'


@pytest.fixture(scope="session")
def case():
    """Outlook, windows and settings: two sites, ascents then model rows, a gap, a hostile name."""
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
    lines = (line(), line(name="=far & <b>hill</b>", wave="optical", target_height=60.0))
    chosen = settings(sightlines=lines, members=16, title="Test coast")
    outlook = make_outlook(profiles(rows), chosen)
    return outlook, find_windows(outlook, chosen), chosen
