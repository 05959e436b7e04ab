"""Products of a run: made in a staging folder, then put in place one by one, the page last.

A run that fails while making them leaves the earlier products untouched; one that is killed while
putting them in place leaves a mixture of whole files with the page still the old one.
"""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from forecast import __version__
from forecast.inputs import fingerprint

if TYPE_CHECKING:
    import xarray as xr

    from forecast.outlook.view import SightlineView
    from forecast.settings import Settings, Site

__all__ = [
    "earlier_record",
    "make_charts",
    "make_pictures",
    "make_products",
    "product_names",
    "publish",
    "staging_folder",
]

PAGE = "index.html"
RECORD = "run.json"

#: Called with (done, total, label).
Progress = Callable[[int, int, str], None]


@contextmanager
def staging_folder(output: Path, *, alone: bool = False) -> Iterator[Path]:
    """Make a folder inside `output` for unfinished products; gone at the end, whatever happens.

    Parameters
    ----------
    output : Path
        Folder of the products; made if need be.
    alone : bool
        The caller holds the lock of the folder: what a killed run left behind is cleared away.
    """
    output.mkdir(parents=True, exist_ok=True)
    prefix = ".staging-" if alone else ".unfinished-"
    if alone:
        for left in output.glob(f"{prefix}*"):
            shutil.rmtree(left, ignore_errors=True)
    staging = Path(tempfile.mkdtemp(prefix=prefix, dir=output))
    try:
        yield staging
    finally:
        shutil.rmtree(staging, ignore_errors=True)


def make_charts(
    outlook: xr.Dataset,
    windows: list[Any],
    settings: Settings,
    sites: list[Site],
    folder: Path,
    tell: Progress,
) -> dict[str, dict[str, Any]]:
    """Draw one time–height chart per site, as PNG and SVG.

    Returns
    -------
    dict
        By site name: what `forecast.output.charts.save_chart` returns.
    """
    from forecast.output.charts import draw_time_height, save_chart
    from forecast.output.files import safe_stem

    charts: dict[str, dict[str, Any]] = {}
    stems: set[str] = set()
    for i, site in enumerate(sites):
        stem = safe_stem(site.name, stems)
        stems.add(stem)
        figure = draw_time_height(
            outlook,
            site.name,
            timezone=site.timezone,
            top=settings.chart_top,
            low_stretch=settings.chart_stretch_low,
            windows=windows,
        )
        charts[site.name] = save_chart(figure, folder / stem)
        tell(i + 1, len(sites), "charts")
    return charts


def make_pictures(
    outlook: xr.Dataset,
    views: list[tuple[int, SightlineView]],
    folder: Path,
    tell: Progress,
    stems: set[str],
) -> list[dict[str, Any]]:
    """Draw what observers would see, and for each sightline where to stand, as PNG and SVG.

    Returns
    -------
    list of dict
        One per view: ``view``; ``pictures``, one or two as `forecast.output.charts.save_chart`
        returns them, each with ``phone`` (bytes).
    """
    from forecast.output.files import safe_stem
    from forecast.output.sight_charts import save_sightline_figure
    from forecast.output.stand_chart import save_stand_chart

    made = []
    stood: set[int] = set()
    for i, (number, view) in enumerate(views):
        stem = safe_stem(f"{view.line.name} {np.datetime_as_string(view.time, 'h')}", stems)
        stems.add(stem)
        pictures = [save_sightline_figure(folder / stem, view)]
        if number not in stood:
            stood.add(number)
            stem = safe_stem(f"{view.line.name} where to stand", stems)
            stems.add(stem)
            pictures.append(save_stand_chart(folder / stem, outlook, number, timezone=view.zone))
        made.append({"view": view, "pictures": pictures})
        tell(i + 1, len(views), "pictures")
    return made


def make_products(
    outlook: xr.Dataset,
    windows: list[Any],
    views: list[tuple[int, SightlineView]],
    settings: Settings,
    folder: Path,
    *,
    set_aside: list[dict[str, str]],
    warnings: list[str],
    stamp: str,
    tell: Progress,
) -> dict[str, dict[str, Any]]:
    """Make every product but the run record.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    windows : list of forecast.outlook.Window
        From `forecast.outlook.find_windows`.
    views : list of (int, SightlineView)
        From `forecast.outlook.viewing.window_views`.
    settings : forecast.settings.Settings
        Title, sites, chart top.
    folder : Path
        Staging folder.
    set_aside, warnings
        What the page tells of the inputs.
    stamp : str
        Time of the run, ISO 8601 UTC; the only thing that differs between two runs.
    tell : callable
        Progress.

    Returns
    -------
    dict
        By file name: bytes and sha256.
    """
    from forecast.output.netcdf import write_outlook
    from forecast.output.page import write_page
    from forecast.output.phone_chart import phone_chart
    from forecast.output.tables import write_windows_csv, write_windows_json

    write_outlook(outlook, folder / "outlook.nc", stamp)
    write_windows_csv(windows, folder / "windows.csv")
    meta = {"title": settings.title, "calibration": outlook.attrs["calibration"]}
    write_windows_json(windows, folder / "windows.json", meta)
    present = set(outlook["site"].values.astype(str))
    sites = [site for site in settings.sites if site.name in present]
    charts = make_charts(outlook, windows, settings, sites, folder, tell)
    for site in sites:
        charts[site.name]["phone"] = phone_chart(
            outlook,
            site.name,
            timezone=site.timezone,
            top=settings.chart_top,
            low_stretch=settings.chart_stretch_low,
            windows=windows,
        )
    stems = {path.stem for path in folder.iterdir()}
    write_page(
        folder / PAGE,
        outlook=outlook,
        windows=windows,
        charts=charts,
        sights=make_pictures(outlook, views, folder, tell, stems),
        settings_title=settings.title,
        sites=[(site.name, site.timezone) for site in sites],
        set_aside=set_aside,
        meta={
            "made_at": stamp,
            "version": __version__,
            "warnings": warnings,
            "threshold": settings.window_threshold,
        },
    )
    products = {}
    for path in sorted(folder.iterdir()):
        size, digest = fingerprint(path)
        products[path.name] = {"bytes": size, "sha256": digest}
    return products


def publish(staging: Path, output: Path) -> list[Path]:
    """Move staged files into place, the page last, and delete products of earlier runs.

    Parameters
    ----------
    staging : Path
        Folder of finished files, on the same file system.
    output : Path
        Where readers look.

    Returns
    -------
    list of Path
        Files put in place, in order.
    """
    names = sorted(p.name for p in staging.iterdir())
    names.sort(key=lambda name: (name == PAGE, name == RECORD, name))
    stale = set(earlier_record(output)["products"]) - set(names)
    for name in names:
        if name == RECORD:
            # Before the record that knows them goes; the old page carries its charts itself.
            for old in stale:
                (output / old).unlink(missing_ok=True)
        os.replace(staging / name, output / name)
    return [output / name for name in names]


def earlier_record(output: Path) -> dict[str, Any]:
    """What the last run.json says of the products that lie there.

    Returns
    -------
    dict
        ``products`` by file name, only plain names in the folder itself, and ``products_made``;
        both empty if there is no record that can be read.
    """
    try:
        record = json.loads((output / RECORD).read_text(encoding="utf-8"))
        listed, made = dict(record["products"]), str(record.get("products_made", ""))
    except (OSError, ValueError, KeyError, TypeError, RecursionError):
        return {"products": {}, "products_made": ""}
    plain = {n: v for n, v in listed.items() if Path(n).name == n and not n.startswith(".")}
    return {"products": plain, "products_made": made}


def product_names(output: Path) -> set[str]:
    """Names of files in a folder that runs write there, so that none is taken for an input."""
    fixed = {PAGE, RECORD, "outlook.nc", "windows.csv", "windows.json"}
    return fixed | set(earlier_record(output)["products"])
