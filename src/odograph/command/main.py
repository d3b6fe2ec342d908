"""The `odograph` command: what a workflow engine is not made for."""

from __future__ import annotations

import argparse
import difflib
import os
import sys
import tempfile
import traceback
from collections.abc import Sequence
from pathlib import Path
from typing import NoReturn

from odograph import __version__
from odograph.command import archive, compare, look, replay, store, summary, trace, verify
from odograph.errors import OdographError, SettingsError

EXIT_USAGE, EXIT_DATA, EXIT_INTERNAL, EXIT_SETTINGS, EXIT_STOPPED = 64, 65, 70, 78, 130
COMMANDS = (look, summary, trace, verify, compare, archive, replay, store)

_EXAMPLES = """\
examples:
  odograph look recording.nwb                      what a recording holds, and the settings that read it
  odograph summary                                 what the last run found
  odograph trace results/figures/composition.png   what stands behind a figure
  odograph verify                                  is everything still what the records say
  odograph store                                   how much the kept fits take

The run itself is snakemake's: snakemake --profile workflow/profiles/local

exit codes: 0 done, 64 wrong usage, 65 bad data, 66 no such input, 70 a fault of the program,
78 bad settings, 130 stopped
"""


class Parser(argparse.ArgumentParser):
    """A parser that names the nearest command or option for a mistyped one."""

    def error(self, message: str) -> NoReturn:
        """Say what is wrong, what was probably meant, and where help is."""
        known = [*self._option_string_actions]
        for action in self._actions:
            if isinstance(action, argparse._SubParsersAction):
                known += list(action.choices)
        near = [
            match
            for word in sys.argv[1:]
            if word not in known
            for match in difflib.get_close_matches(word, known, n=1, cutoff=0.6)
        ]
        hint = f"\n  did you mean {near[0]}?" if near else ""
        print(f"{self.prog}: {message}{hint}\n  help: {self.prog} --help", file=sys.stderr)
        sys.exit(EXIT_USAGE)


def make_parser() -> argparse.ArgumentParser:
    """The parser of the command and all its subcommands."""
    parser = Parser(
        prog="odograph",
        description="From NWB recordings of foraging animals to traced claims about what neurons encode.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"odograph {__version__}")
    parser.add_argument("--debug", action="store_true", help="show the traceback of an error")
    subparsers = parser.add_subparsers(title="commands", metavar="COMMAND", parser_class=Parser)
    for command in COMMANDS:
        command.add_parser(subparsers)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; returns the exit code."""
    parser = make_parser()
    args = parser.parse_args(arguments)
    if not hasattr(args, "run"):
        parser.print_help()
        return 0
    try:
        return args.run(args)
    except BrokenPipeError:
        # The reader of the output went away (a pager, `head`); nothing more can be told.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except KeyboardInterrupt:
        print("stopped", file=sys.stderr)
        return EXIT_STOPPED
    except OdographError as error:
        if args.debug:
            raise
        print(error.message(), file=sys.stderr)
        return EXIT_SETTINGS if isinstance(error, SettingsError) else EXIT_DATA
    except Exception as error:
        if args.debug:
            raise
        return _internal(error)


def _internal(error: Exception) -> int:
    """A fault of the program: one line for people, the traceback in a file."""
    with tempfile.NamedTemporaryFile("w", prefix="odograph-", suffix=".log", delete=False) as log:
        log.write("".join(traceback.format_exception(error)))
    print(
        f"a fault of the program: {type(error).__name__}: {error}\n"
        f"  what to do: please report it with {Path(log.name)}, or run again with --debug",
        file=sys.stderr,
    )
    return EXIT_INTERNAL


if __name__ == "__main__":
    sys.exit(main())
