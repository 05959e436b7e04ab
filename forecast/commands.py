"""The commands: their arguments, and what runs them.

Nothing heavy is imported before a command needs it.
"""

from __future__ import annotations

import argparse
import os

from forecast.streams import complain, report

TYPE_CHECKING = False  # what typing defines; importing typing costs a fifth of --help
if TYPE_CHECKING:
    from pathlib import Path

    from forecast.progress import Reporter

__all__ = ["COMMANDS"]


def _nightly_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("settings", metavar="SETTINGS.toml")
    parser.add_argument("-o", "--output", metavar="DIR", help="folder instead of the settings' own")
    parser.add_argument("--dry-run", action="store_true", help="print the plan and stop")


def _inspect_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("files", nargs="+", metavar="FILE")
    parser.add_argument("--json", action="store_true", help="machine-readable")
    _naming(parser)


def _chart_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("files", nargs="+", metavar="FILE")
    parser.add_argument("-o", "--output", metavar="DIR", default=".", help="folder (default: here)")
    parser.add_argument(
        "--top", type=float, default=3000.0, metavar="M", help="chart top, m (3000)"
    )
    parser.add_argument("--timezone", default="UTC", metavar="ZONE", help="for local time (UTC)")
    parser.add_argument(
        "--point", metavar="LAT,LON", help="where to take profiles from gridded model data"
    )
    parser.add_argument(
        "--station",
        action="append",
        default=[],
        metavar="NAME",
        help="only the soundings of this station; repeatable",
    )
    parser.add_argument("--members", type=int, default=64, metavar="N", help="members (64)")
    _naming(parser)


def _sightline_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("settings", metavar="SETTINGS.toml")
    parser.add_argument(
        "--at",
        metavar="TIME",
        help="such as 2031-06-11T04:00, UTC unless it carries an offset; the nearest valid time is "
        "taken (default: the likeliest of each sightline)",
    )
    parser.add_argument(
        "--name",
        action="append",
        default=[],
        metavar="SIGHTLINE",
        help="only this sightline; repeatable",
    )
    parser.add_argument("-o", "--output", metavar="DIR", default=".", help="folder (default: here)")


def _check_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("settings", metavar="SETTINGS.toml")


def _naming(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--name",
        action="append",
        default=[],
        metavar="ROLE=VARIABLE",
        help="which variable fills a role, such as air_temperature='tdry [degC]'; repeatable",
    )
    parser.add_argument(
        "--settings", metavar="SETTINGS.toml", help="take the mapping of names from here"
    )


def _names(arguments: argparse.Namespace) -> dict[str, str]:
    from forecast.errors import InputError, SettingsError
    from forecast.ingest.recognition import parse_names
    from forecast.settings import load_settings

    names = dict(load_settings(arguments.settings).names) if arguments.settings else {}
    faults = []
    for entry in arguments.name:
        role, found, variable = (part.strip() for part in entry.partition("="))
        if not found or not role or not variable:
            faults.append(f"found {entry!r}; expected ROLE=VARIABLE")
            continue
        try:
            parse_names({role: variable})
        except InputError as error:
            faults.append(error.reason)
        names[role] = variable
    if faults:
        raise SettingsError("--name", faults)
    return names


def _reporter(arguments: argparse.Namespace) -> Reporter:
    from forecast.progress import Reporter

    return Reporter(arguments.quiet)


def _nightly(arguments: argparse.Namespace) -> int:
    from pathlib import Path

    from forecast.nightly import EXIT_NOTHING_USABLE, plan_run, run_nightly
    from forecast.settings import load_settings
    from forecast.stopping import stopping_cleanly

    settings = load_settings(arguments.settings)
    plan = plan_run(settings, Path(arguments.output) if arguments.output else None)
    if arguments.dry_run:
        print(f"{settings.title}: output to {plan.output}")
        for number, step in enumerate(plan.steps, 1):
            print(f"{number}. {step}")
        _print_inputs(plan.inputs, plan.warnings, settings.base)
        return 0
    with _reporter(arguments) as reporter, stopping_cleanly():
        result = run_nightly(plan, reporter)
        for warning in result.warnings:
            reporter.line(f"note: {warning}")
        for item in result.set_aside:
            reporter.line(f"set aside: {item['file']}: {item['reason']}")
    if result.exit_code == EXIT_NOTHING_USABLE:
        complain(
            f"bendcast: nothing usable among {len(plan.inputs)} inputs; earlier products in "
            f"{plan.output} are left as they were"
        )
        return result.exit_code
    report(
        f"{settings.title}: {result.profiles} profiles, {len(result.windows)} windows, "
        f"{len(result.set_aside)} inputs set aside\n"
        f"page: {plan.output / 'index.html'}"
    )
    return result.exit_code


def _print_inputs(inputs: list, warnings: list[str], base: Path) -> None:
    from forecast.errors import printable

    for item in inputs:
        print(f"  {item.site}: {printable(os.path.relpath(item.path, base))}")
    for warning in warnings:
        print(f"  note: {warning}")


def _inspect(arguments: argparse.Namespace) -> int:
    from forecast.ingest import inspect_files
    from forecast.nightly import EXIT_NOTHING_USABLE, EXIT_SOME_SET_ASIDE

    reports = inspect_files(arguments.files, names=_names(arguments) or None)
    if arguments.json:
        import json

        print(json.dumps([r.to_dict() for r in reports], indent=2, ensure_ascii=False))
    else:
        print("\n\n".join(r.to_text() for r in reports))
    refused = sum(bool(r.refused) for r in reports)
    if refused == len(reports):
        return EXIT_NOTHING_USABLE
    return EXIT_SOME_SET_ASIDE if refused else 0


def _check(arguments: argparse.Namespace) -> int:
    from forecast.nightly import plan_run
    from forecast.settings import load_settings

    settings = load_settings(arguments.settings)
    plan = plan_run(settings)
    print(f"{settings.title}: settings are right")
    for site in settings.sites:
        count = sum(item.site == site.name for item in plan.inputs)
        print(
            f"  site {site.name}: {site.latitude:.4f}, {site.longitude:.4f}, {site.timezone}; "
            f"{count} inputs"
        )
    for line in settings.sightlines:
        print(
            f"  sightline {line.name}: {line.wave}, {line.observer_height:g} m to "
            f"{line.target_height:g} m, {line.distance / 1e3:.1f} km from {line.site}"
        )
    print(f"  output: {plan.output}")
    for warning in plan.warnings:
        print(f"  note: {warning}")
    return 0


def _chart(arguments: argparse.Namespace) -> int:
    from pathlib import Path

    from forecast.charting import ChartRequest, chart_files, check_request, choose_stations
    from forecast.ingest import read_files
    from forecast.nightly import EXIT_NOTHING_USABLE, EXIT_SOME_SET_ASIDE
    from forecast.stopping import stopping_cleanly

    settings, points = check_request(
        ChartRequest(
            output=Path(arguments.output),
            timezone=arguments.timezone,
            top=arguments.top,
            members=arguments.members,
            point=arguments.point,
        )
    )
    names = _names(arguments) or None
    with _reporter(arguments) as reporter, stopping_cleanly():
        reading = read_files(
            dict.fromkeys(arguments.files),
            names=names,
            points=points,
            progress=lambda done, total, label: reporter(done, total, "read profiles"),
        )
        for note in reading.notes:
            reporter.line(f"note: {note}")
        for item in reading.set_aside:
            complain(f"set aside: {item.file}: {item.reason}")
        if reading.profiles is None:
            complain("bendcast: nothing usable among the files given")
            return EXIT_NOTHING_USABLE
        profiles = choose_stations(reading.profiles, arguments.station)
        products = chart_files(profiles, settings, settings.output, reporter)
    report("\n".join(str(path) for path in products))
    return EXIT_SOME_SET_ASIDE if reading.set_aside else 0


def _sightline(arguments: argparse.Namespace) -> int:
    from pathlib import Path

    from forecast.nightly import EXIT_SOME_SET_ASIDE
    from forecast.settings import load_settings
    from forecast.sightline_pictures import SightlineRequest, check_request, draw_sightlines
    from forecast.stopping import stopping_cleanly

    settings = load_settings(arguments.settings)
    output = Path(arguments.output)
    numbers, time = check_request(
        SightlineRequest(output, arguments.at, tuple(arguments.name)), settings
    )
    with _reporter(arguments) as reporter, stopping_cleanly():
        made = draw_sightlines(settings, numbers, time, output, reporter)
        for note in made.notes:
            reporter.line(f"note: {note}")
        for item in made.set_aside:
            reporter.line(f"set aside: {item['file']}: {item['reason']}")
    report("\n\n".join(made.words))
    report("\n".join(str(path) for path in made.files))
    return EXIT_SOME_SET_ASIDE if made.set_aside else 0


#: By name: what it does, what adds its arguments, what runs it.
COMMANDS = {
    "nightly": (
        "the scheduled run: from soundings to charts, tables and the page",
        _nightly_arguments,
        _nightly,
    ),
    "inspect": (
        "say what would be taken for what, and what would be refused",
        _inspect_arguments,
        _inspect,
    ),
    "chart": ("chart and netCDF of some soundings, without settings", _chart_arguments, _chart),
    "sightline": (
        "pictures of what an observer would see at a time, and where to stand",
        _sightline_arguments,
        _sightline,
    ),
    "check": ("validate settings and say which inputs they find", _check_arguments, _check),
}
