"""The ``bendcast`` command: what was asked for, in which words it is answered, exit codes.

Nothing is computed here, and nothing heavy is imported before a command needs it.
"""

from __future__ import annotations

import argparse
import gc
import os
import sys

from forecast import __version__
from forecast.commands import COMMANDS
from forecast.streams import complain, drop_stdout, mend_streams

__all__ = ["main"]

_EPILOG = """\
examples:
  bendcast inspect ascents/*.nc              what would be taken for what, and what is refused
  bendcast chart ascents/*.nc -o charts      chart and netCDF without settings
  bendcast check coast.toml                  are the settings right
  bendcast sightline coast.toml --at 2031-06-11T04:00     what would be seen then
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
    mend_streams()
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
        drop_stdout()
        return 0
    except KeyboardInterrupt:
        complain("interrupted")
        return EXIT_INTERRUPTED
    except Exception as error:
        if arguments.debug:
            import traceback

            complain(traceback.format_exc())
        return _explain(error)


def _explain(error: Exception) -> int:
    """One clear message for an error, and its exit code."""
    from forecast.errors import InputError, SettingsError, printable
    from forecast.nightly import EXIT_NOTHING_USABLE, EXIT_OUTPUT_FAILED, OutputError

    if isinstance(error, SettingsError):
        complain(str(error))
        return EXIT_SETTINGS_WRONG
    if isinstance(error, InputError):
        complain(f"bendcast: {error}")
        return EXIT_NOTHING_USABLE
    if isinstance(error, OutputError):
        complain(f"bendcast: {printable(error)}")
        return EXIT_OUTPUT_FAILED
    complain(
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
    for name, (text, arguments, run) in COMMANDS.items():
        command = commands.add_parser(name, help=text, description=text)
        if name in argv:
            command.set_defaults(run=run)
            arguments(command)
            command.add_argument("-q", "--quiet", action="store_true", help="errors only")
            command.add_argument("--debug", action="store_true", help="show where an error arose")
    return parser
