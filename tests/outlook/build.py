"""Small invented profiles and settings for the outlook's tests."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.settings import Settings, Sightline

HEIGHT = np.arange(0.0, 4000.0, 20.0)
START = np.datetime64("2031-05-01T00:00:00", "ns")


def air(inversion: float | None = None, top: float | None = None) -> dict[str, np.ndarray]:
    """Hydrostatic air, 6.5 K/km; with a dry, warm lid of 60 m from `inversion` (m) if given."""
    t = 288.15 - 0.0065 * HEIGHT
    p = 101325.0 * (1.0 - 0.0065 * HEIGHT / 288.15) ** 5.2559
    rh = np.full(HEIGHT.size, 0.6)
    if inversion is not None:
        above = np.clip((HEIGHT - inversion) / 60.0, 0.0, 1.0)
        t = t + 6.0 * above
        rh = 0.85 - 0.65 * above
    state = {
        "height": HEIGHT.copy(),
        "air_pressure": p,
        "air_temperature": t,
        "specific_humidity": specific_humidity_from_relative_humidity(rh, t, p),
    }
    if top is not None:
        for a in state.values():
            a[top < HEIGHT] = np.nan
    return state


def profiles(rows: list[dict]) -> xr.Dataset:
    """Profiles dataset; each row: air=…, hours=…, kind=…, lead=… (h), site=…, member=…."""
    names = ("height", "air_pressure", "air_temperature", "specific_humidity")
    data = {n: (("profile", "level"), np.stack([r["air"][n] for r in rows])) for n in names}
    hour = np.timedelta64(3600 * 10**9, "ns")

    def column(values: list) -> tuple[str, np.ndarray]:
        return ("profile", np.array(values))

    return xr.Dataset(
        data,
        coords={
            "time": column([START + int(r.get("hours", 0)) * hour for r in rows]),
            "latitude": column([float(r.get("latitude", 51.0)) for r in rows]),
            "longitude": column([-20.0] * len(rows)),
            "station": column([r.get("station", "buoy") for r in rows]),
            "site": column([r.get("site", "cape") for r in rows]),
            "lead_time": column([int(r.get("lead", 0)) * hour for r in rows]),
            "source_kind": column([r.get("kind", "ascent") for r in rows]),
            "source_file": column([r.get("file", "a.nc") for r in rows]),
            "member": column([int(r.get("member", 0)) for r in rows]),
        },
    )


def line(**changes) -> Sightline:
    """A radio sightline just beyond the standard horizon."""
    values = {
        "name": "link",
        "site": "cape",
        "observer_height": 20.0,
        "target_height": 30.0,
        "target_base_height": 0.0,
        "distance": 60e3,
        "azimuth": float("nan"),
        "wave": "radio",
        "wavelength": 550e-9,
    }
    return Sightline(**{**values, **changes})


def settings(**changes) -> Settings:
    """The settings that the outlook reads."""
    values = {
        "title": "test",
        "members": 32,
        "seed": 1,
        "window_threshold": 0.5,
        "minimum_duct_strength": 2.0,
        "chart_top": 3000.0,
        "output": Path("outlook"),
        "sightlines": (),
        "sites": (),
    }
    return Settings(**{**values, **changes})
