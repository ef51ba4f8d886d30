"""The command `fallow`: finds the command named, runs it, turns whatever goes wrong into one line and an exit code.

Nothing heavy is imported here or while the arguments are read: commands that only talk to a service start fast.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from importlib import metadata
from typing import NoReturn

from service.commands import local, remote, serving
from service.commands.failures import ExitCode, explain

_GROUPS = (serving, local, remote)


class _Parser(argparse.ArgumentParser):
    """Answers wrong usage with one line, like every other error of the command."""

    def error(self, message: str) -> NoReturn:
        self.exit(ExitCode.REFUSED, f"{self.prog}: {message}; see `{self.prog} --help`.\n")


def build_parser() -> argparse.ArgumentParser:
    """The whole command line, one sub-command per row of the groups."""
    parser = _Parser(
        prog="fallow",
        description="Turns undersampled multi-coil Cartesian MRI k-space into images. Not for diagnosis.",
        epilog="Exit codes: 0 done, 1 internal error, 2 input refused, 3 job failed or dismissed, "
        "4 service unreachable.",
    )
    parser.add_argument("--version", action="version", version=f"fallow {metadata.version('fallow')}")
    parser.add_argument(
        "--traceback", action="store_true", help="show where an error came from, for a bug report"
    )
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, parser_class=_Parser)
    for group in _GROUPS:
        group.add_commands(commands)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    arguments : sequence of str, optional
        Those of the process by default.

    Returns
    -------
    int
        Exit code: 0 done, 1 internal error, 2 input refused, 3 job failed or dismissed, 4 service unreachable.
    """
    parsed = build_parser().parse_args(arguments)
    try:
        code: int = parsed.run(parsed)
        sys.stdout.flush()
    except (Exception, KeyboardInterrupt) as error:
        if parsed.traceback:
            raise
        line, code = explain(error)
        if line:
            print(f"fallow {parsed.command}: {line}", file=sys.stderr)
    return code


if __name__ == "__main__":
    sys.exit(main())
