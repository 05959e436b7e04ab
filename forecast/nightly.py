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
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING, Any

from forecast import __version__
from forecast.errors import BendcastError, printable
from forecast.inputs import (
    InputFile,
    Stray,
    find_inputs,
    fingerprint,
    join_profiles,
    reading_groups,
    share_out,
    unclaimed,
)
from forecast.products import (
    RECORD,
    Progress,
    earlier_record,
    make_products,
    product_names,
    publish,
    staging_folder,
)

if TYPE_CHECKING:
    import xarray as xr

    from forecast.settings import Settings, Site

__all__ = [
    "EXIT_ALL_DONE",
    "EXIT_NOTHING_USABLE",
    "EXIT_OUTPUT_FAILED",
    "EXIT_SOME_SET_ASIDE",
    "OutputError",
    "Plan",
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

#: Steps of a run, in order.
STEPS = ("find inputs", "read profiles", "outlook", "products", "publish, the page last")

_OUTCOMES = {
    EXIT_ALL_DONE: "all done",
    EXIT_SOME_SET_ASIDE: "done, some inputs set aside",
    EXIT_NOTHING_USABLE: "nothing usable, earlier products left as they were",
}

_PACKAGES = ("numpy", "scipy", "numba", "xarray", "netCDF4", "matplotlib", "pyproj", "jinja2")


class OutputError(BendcastError, OSError):
    """The products cannot be written."""


@dataclass(frozen=True)
class Plan:
    """What a run will do."""

    settings: Settings
    inputs: list[InputFile]
    warnings: list[str]
    output: Path
    steps: tuple[str, ...] = STEPS


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


@dataclass
class _Record:
    """What run.json tells, gathered along the way."""

    started: str
    inputs: list[dict[str, Any]] = field(default_factory=list)
    set_aside: list[dict[str, str]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def timed(self, step: str) -> Iterator[None]:
        """Note how long a step takes."""
        start = time.monotonic()
        yield
        self.seconds[step] = time.monotonic() - start


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

    record = _Record(time_stamp(), warnings=list(plan.warnings))
    settings = plan.settings
    with record.timed("read profiles"):
        profiles = _read(plan, record, tell)
    result = RunResult(EXIT_NOTHING_USABLE, plan.output)
    result.set_aside, result.warnings = record.set_aside, record.warnings
    if profiles is None:
        _write_record(plan, record, plan.output, result.exit_code, earlier_record(plan.output))
        return result
    with record.timed("outlook"):
        outlook = make_outlook(profiles, settings, tell)
        result.windows = find_windows(outlook, settings)
    result.profiles = int(profiles.sizes["profile"])
    result.exit_code = EXIT_SOME_SET_ASIDE if record.set_aside else EXIT_ALL_DONE
    with staging_folder(plan.output, alone=True) as staging:
        with record.timed("products"):
            products = make_products(
                outlook, result.windows, settings, staging, set_aside=record.set_aside,
                warnings=record.warnings, stamp=record.started, tell=tell,
            )  # fmt: skip
        made = {"products": products, "products_made": record.started}
        _write_record(plan, record, staging, result.exit_code, made)
        result.products = [path.name for path in publish(staging, plan.output)]
    return result


def _read(plan: Plan, record: _Record, tell: Progress) -> xr.Dataset | None:
    """Profiles of every site, matched to it; None if nothing is usable."""
    from forecast.ingest import read_files

    readable = _fingerprints(plan, record)
    groups = reading_groups(
        [item for item in plan.inputs if item.path in readable], plan.settings.sites
    )
    total = sum(len(paths) for _, paths in groups)
    parts: list[xr.Dataset] = []
    strays = []
    done = 0
    for sites, paths in groups:
        label = printable(", ".join(site.name for site in sites))

        def step(count: int, _: int, __: str, offset: int = done) -> None:
            tell(offset + count, total, "read profiles")

        reading = read_files(
            paths,
            names=plan.settings.names or None,
            points=[(site.name, site.latitude, site.longitude) for site in sites],
            method=sites[0].point_method,
            progress=step,
        )
        done += len(paths)
        for item in reading.set_aside:
            record.set_aside.append({"site": label, "file": item.file, "reason": item.reason})
        noun = "site" if len(sites) == 1 else "sites"
        record.warnings += [f"{noun} {label}: {printable(note)}" for note in reading.notes]
        if reading.profiles is not None:
            served, left = share_out(reading.profiles, sites)
            parts += served
            strays += left
    _settle(plan, record, parts, strays)
    return join_profiles(parts) if parts else None


def _settle(plan: Plan, record: _Record, parts: list[xr.Dataset], strays: list[Stray]) -> None:
    """Record what was read but serves no site, and sites that nothing serves."""
    used = {file for part in parts for file in part["source_file"].values.astype(str)}
    refused, notes = unclaimed(strays, used)
    for stray in refused:
        record.set_aside.append(
            {"site": stray.site, "file": printable(stray.file), "reason": printable(stray.reason)}
        )
    record.warnings += notes
    served = {str(part["site"].values[0]) for part in parts}
    record.warnings += [
        f"site {site.name}: no usable profile"
        for site in plan.settings.sites
        if site.name not in served
    ]


def _fingerprints(plan: Plan, record: _Record) -> set[Path]:
    """Note size and sha256 of each input; one that cannot be opened is set aside here."""
    sites: dict[Path, list[str]] = {}
    for item in plan.inputs:
        sites.setdefault(item.path, []).append(item.site)
    readable = set()
    for path, names in sites.items():
        file = printable(os.path.relpath(path, plan.settings.base))
        try:
            size, digest = fingerprint(path)
        except OSError as error:
            reason = f"cannot be read: {error.strerror}"
            record.set_aside.append(
                {"site": ", ".join(names), "file": printable(path.name), "reason": reason}
            )
            continue
        record.inputs.append({"sites": names, "file": file, "bytes": size, "sha256": digest})
        readable.add(path)
    return readable


def _write_record(
    plan: Plan, record: _Record, folder: Path, exit_code: int, made: dict[str, Any]
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
