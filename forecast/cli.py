"""The ``bendcast`` command: what was asked for, in which words it is answered, exit codes.

Nothing is computed here, and nothing heavy is imported before a command needs it.
"""

from __future__ import annotations

import argparse
import gc
import os
import sys

from forecast import __version__

TYPE_CHECKING = False  # what typing defines; importing typing costs a fifth of --help
if TYPE_CHECKING:
    from pathlib import Path

    from forecast.progress import Reporter

__all__ = ["main"]

_EPILOG = """\
examples:
  bendcast inspect ascents/*.nc              what would be taken for what, and what is refused
  bendcast chart ascents/*.nc -o charts      chart and netCDF without settings
  bendcast check coast.toml                  are the settings right
  bendcast nightly coast.toml                the scheduled run

exit codes:
  0  all done                       4  nothing usable
  1  unexpected error               5  settings wrong
  2  wrong usage                    6  output could not be written
  3  done, some inputs set aside    130, 143  interrupted, terminated

Not for navigation or safety of life. Never point optics near the Sun.
"""

EXIT_UNEXPECTED = 1
EXIT_SETTINGS_WRONG = 5
EXIT_INTERRUPTED = 130


def main(argv: list[str] | None = None) -> int:
    """Run the command.

    Parameters
    ----------
    argv : list of str, optional
        Arguments; those of the process by default.

    Returns
    -------
    int
        Exit code, as ``bendcast --help`` lists them.
    """
    _mend_streams()
    whole_process = argv is None
    argv = sys.argv[1:] if argv is None else argv
    arguments = _parser(argv).parse_args(argv)
    try:
        code = arguments.run(arguments)
        sys.stdout.flush()
        if whole_process:
            # Python would search a million objects for cycles before it ends: half a second.
            gc.freeze()
        return code
    except BrokenPipeError:
        _drop_stdout()
        return 0
    except KeyboardInterrupt:
        _complain("interrupted")
        return EXIT_INTERRUPTED
    except Exception as error:
        if arguments.debug:
            import traceback

            _complain(traceback.format_exc())
        return _explain(error)


def _mend_streams() -> None:
    """Make sure that there is something to write to, and that any text can be written to it."""
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:  # closed by the caller
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))  # noqa: SIM115
    if hasattr(sys.stdout, "reconfigure"):
        # File names may hold bytes, and titles letters, that the terminal's encoding lacks.
        sys.stdout.reconfigure(errors="backslashreplace")


def _drop_stdout() -> None:
    """The reader of a pipe has gone; nothing is left to say to it, at exit neither."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _report(text: str) -> None:
    """A result on standard output; a reader that has gone does not change what was done."""
    try:
        print(text, flush=True)
    except BrokenPipeError:
        _drop_stdout()


def _complain(text: str) -> None:
    """A fault on standard error, if anyone still listens there."""
    try:
        print(text, file=sys.stderr, flush=True)
    except OSError:
        return


def _explain(error: Exception) -> int:
    """One clear message for an error, and its exit code."""
    from forecast.errors import InputError, SettingsError, printable
    from forecast.nightly import EXIT_NOTHING_USABLE, EXIT_OUTPUT_FAILED, OutputError

    if isinstance(error, SettingsError):
        _complain(str(error))
        return EXIT_SETTINGS_WRONG
    if isinstance(error, InputError):
        _complain(f"bendcast: {error}")
        return EXIT_NOTHING_USABLE
    if isinstance(error, OutputError):
        _complain(f"bendcast: {printable(error)}")
        return EXIT_OUTPUT_FAILED
    _complain(
        f"bendcast: unexpected {type(error).__name__}: {printable(error)}\n"
        "This is a defect of bendcast; --debug shows where."
    )
    return EXIT_UNEXPECTED


class _HelpFormatter(argparse.RawDescriptionHelpFormatter):
    """Knows the terminal's width without the import that argparse would make for it."""

    def __init__(self, prog: str):
        try:
            width = os.get_terminal_size(sys.stdout.fileno()).columns - 2
        except (OSError, ValueError, AttributeError):
            width = 98
        super().__init__(prog, width=min(max(width, 40), 118))


def _parser(argv: list[str]) -> argparse.ArgumentParser:
    """Parser of the command line; only commands named there get their arguments (it is quicker)."""
    parser = argparse.ArgumentParser(
        prog="bendcast",
        description="When the low atmosphere bends light or radio waves past the horizon: outlooks "
        "from open soundings.",
        epilog=_EPILOG,
        formatter_class=_HelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"bendcast {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")
    for name, (text, arguments, run) in _COMMANDS.items():
        command = commands.add_parser(name, help=text, description=text)
        if name in argv:
            command.set_defaults(run=run)
            arguments(command)
            command.add_argument("-q", "--quiet", action="store_true", help="errors only")
            command.add_argument("--debug", action="store_true", help="show where an error arose")
    return parser


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
        _complain(
            f"bendcast: nothing usable among {len(plan.inputs)} inputs; earlier products in "
            f"{plan.output} are left as they were"
        )
        return result.exit_code
    _report(
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
            _complain(f"set aside: {item.file}: {item.reason}")
        if reading.profiles is None:
            _complain("bendcast: nothing usable among the files given")
            return EXIT_NOTHING_USABLE
        profiles = choose_stations(reading.profiles, arguments.station)
        products = chart_files(profiles, settings, settings.output, reporter)
    _report("\n".join(str(path) for path in products))
    return EXIT_SOME_SET_ASIDE if reading.set_aside else 0


_COMMANDS = {
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
    "check": ("validate settings and say which inputs they find", _check_arguments, _check),
}
