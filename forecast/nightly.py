"""The scheduled run: the one place that strings the stages together.

Settings → inputs → profiles → outlook → products. A bad input is set aside with its reason and
the rest goes on. How products are put in place is told in `forecast.products`.

Nothing of an outlook hangs on when it is made. A second run on the same inputs gives the same bytes
but for: ``started``, ``seconds`` and ``products_made`` in ``run.json`` (and the checksums of the
two files that follow), ``history`` and ``date_created`` in ``outlook.nc``, and "made at" on the
page. ``SOURCE_DATE_EPOCH`` fixes all but ``seconds``.
"""

from __future__ import annotations

import json
import os
import platform
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING, Any

from forecast import __version__
from forecast.errors import BendcastError
from forecast.inputs import find_inputs
from forecast.products import (
    RECORD,
    Progress,
    earlier_record,
    make_products,
    product_names,
    publish,
    staging_folder,
)
from forecast.reading import Plan, RunRecord, read_profiles, read_surroundings

if TYPE_CHECKING:
    from forecast.settings import Settings, Site

__all__ = [
    "EXIT_ALL_DONE",
    "EXIT_NOTHING_USABLE",
    "EXIT_OUTPUT_FAILED",
    "EXIT_SOME_SET_ASIDE",
    "OutputError",
    "RunResult",
    "plan_run",
    "run_nightly",
    "time_stamp",
    "writing",
]

EXIT_ALL_DONE = 0
EXIT_SOME_SET_ASIDE = 3
EXIT_NOTHING_USABLE = 4
EXIT_OUTPUT_FAILED = 6

_OUTCOMES = {
    EXIT_ALL_DONE: "all done",
    EXIT_SOME_SET_ASIDE: "done, some inputs set aside",
    EXIT_NOTHING_USABLE: "nothing usable, earlier products left as they were",
}

_PACKAGES = ("numpy", "scipy", "numba", "xarray", "netCDF4", "matplotlib", "pyproj", "jinja2")


class OutputError(BendcastError, OSError):
    """The products cannot be written."""


@dataclass
class RunResult:
    """What a run did."""

    exit_code: int
    output: Path
    products: list[str] = field(default_factory=list)
    set_aside: list[dict[str, str]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    windows: list[Any] = field(default_factory=list)
    profiles: int = 0


def plan_run(settings: Settings, output: Path | None = None) -> Plan:
    """Find the inputs and say what a run would do, without doing it.

    Parameters
    ----------
    settings : forecast.settings.Settings
        Validated settings.
    output : Path, optional
        Folder for the products in place of the settings' own.

    Returns
    -------
    Plan
        Inputs in reading order, and warnings about patterns without files.
    """
    folder = (output or settings.output).resolve()
    inputs, warnings = find_inputs(settings, folder, product_names(folder))
    return Plan(settings, inputs, warnings, folder)


def run_nightly(plan: Plan, progress: Progress | None = None) -> RunResult:
    """Do what the plan says.

    Parameters
    ----------
    plan : Plan
        From `plan_run`.
    progress : callable, optional
        Called with (done, total, label) as each step moves on.

    Returns
    -------
    RunResult
        Exit code and what was made. Nothing usable: the earlier products stay, only ``run.json``
        is written anew.

    Raises
    ------
    OutputError
        If the output folder cannot be written or another run holds it.
    """
    from filelock import FileLock, Timeout

    tell = progress or (lambda done, total, label: None)
    with writing(plan.output):
        plan.output.mkdir(parents=True, exist_ok=True)
        try:
            with FileLock(plan.output / ".bendcast.lock", timeout=0):
                return _run(plan, tell)
        except Timeout:
            raise OutputError(
                f"{plan.output}: another run is writing here; wait for it to end"
            ) from None


@contextmanager
def writing(output: Path) -> Iterator[None]:
    """Turn a failure to write into one clear error."""
    try:
        yield
    except OSError as error:
        if isinstance(error, BendcastError):
            raise
        reason = error.strerror or str(error)
        raise OutputError(f"{error.filename or output}: cannot be written: {reason}") from error


def _run(plan: Plan, tell: Progress) -> RunResult:
    from forecast.outlook import find_windows, make_outlook
    from forecast.outlook.speaking import speaking_profiles
    from forecast.outlook.viewing import window_views

    record = RunRecord(time_stamp(), warnings=list(plan.warnings))
    settings = plan.settings
    with record.timed("read profiles"):
        profiles = read_profiles(plan, record, tell)
        around = read_surroundings(settings, record)
    result = RunResult(EXIT_NOTHING_USABLE, plan.output)
    result.set_aside, result.warnings = record.set_aside, record.warnings
    if profiles is None:
        _write_record(plan, record, plan.output, result.exit_code, earlier_record(plan.output))
        return result
    with record.timed("outlook"):
        outlook = make_outlook(profiles, settings, tell, around)
        result.windows = find_windows(outlook, settings)
        told = speaking_profiles(profiles, settings, around)
        views = window_views(told, outlook, result.windows, settings, around)
    result.profiles = int(profiles.sizes["profile"])
    result.exit_code = EXIT_SOME_SET_ASIDE if record.set_aside else EXIT_ALL_DONE
    with staging_folder(plan.output, alone=True) as staging:
        with record.timed("products"):
            products = make_products(
                outlook, result.windows, views, settings, staging, set_aside=record.set_aside,
                warnings=record.warnings, stamp=record.started, tell=tell,
            )  # fmt: skip
        made = {"products": products, "products_made": record.started}
        _write_record(plan, record, staging, result.exit_code, made)
        result.products = [path.name for path in publish(staging, plan.output)]
    return result


def _write_record(
    plan: Plan, record: RunRecord, folder: Path, exit_code: int, made: dict[str, Any]
) -> None:
    settings = plan.settings
    body = {
        "started": record.started,
        "seconds": {name: round(value, 3) for name, value in record.seconds.items()},
        "outcome": _OUTCOMES[exit_code],
        "exit_code": exit_code,
        "bendcast": __version__,
        "python": platform.python_version(),
        "packages": {name: _version(name) for name in _PACKAGES},
        "settings": {
            "title": settings.title,
            "sha256": settings.digest,
            "members": settings.members,
            "seed": settings.seed,
            "sites": [_plain(site, settings.base) for site in settings.sites],
        },
        "inputs": record.inputs,
        "set_aside": record.set_aside,
        "warnings": record.warnings,
        **made,
    }
    from forecast.output.files import write_text_atomic

    text = json.dumps(body, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    write_text_atomic(folder / RECORD, text)


def _plain(site: Site, base: Path) -> dict[str, Any]:
    """A site's settings as JSON has them, paths as seen from the settings file."""
    return {
        key: os.path.relpath(value, base) if isinstance(value, Path) else value
        for key, value in asdict(site).items()
    }


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "not installed"


def time_stamp() -> str:
    """Time now, UTC; SOURCE_DATE_EPOCH, where it is a time, stands for it."""
    now = datetime.now(UTC)
    epoch = os.environ.get("SOURCE_DATE_EPOCH", "")
    if epoch.isascii() and epoch.isdigit() and len(epoch) <= 11:
        now = datetime.fromtimestamp(int(epoch), UTC)
    return now.strftime("%Y-%m-%dT%H:%M:%SZ")
