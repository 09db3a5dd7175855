"""The program ``sweepset``: one file per command, found by name, loaded when needed.

A command file has ``HELP``, ``add_arguments(parser)`` and ``run(args) -> int``, and imports
at its top only what costs nothing, so that ``sweepset --help`` is instant.
"""

from __future__ import annotations

import argparse
import errno
import os
import re
import sys
from collections.abc import Sequence
from contextlib import suppress
from importlib import import_module
from typing import IO, Any, NoReturn

from ...models.errors import InputError, near_names

COMMANDS = (
    "demo",
    "log",
    "curve",
    "sort",
    "trim",
    "vary",
    "stock",
    "sheet",
    "render",
    "audition",
    "batch",
    "netlist",
)

EXIT_FAILED = 1
EXIT_INPUT = 2
EXIT_INTERRUPTED = 130  # 128 + SIGINT, as shells have it
EXIT_CLOSED_PIPE = 141  # 128 + SIGPIPE
TRACEBACK = "SWEEPSET_TRACEBACK"
# A file that a command writes has its own message; this is for its output into a file.
FULL = (errno.ENOSPC, errno.EDQUOT)

EPILOG = """\
examples:
  sweepset demo
  sweepset render --help
  sweepset render riff.wav --tray tray.csv --set J07,J12,J31,J40 -o take.wav

exit codes: 0 done, 2 something given cannot be used (nothing was written), 1 a fault of
sweepset itself, 130 interrupted
"""


class _Parser(argparse.ArgumentParser):
    """A parser whose messages look like those of all other faults."""

    def __init__(self, *args: Any, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        # "-2.10V/4.2mA" after --set is a value: no option here begins with a digit.
        self._negative_number_matcher = re.compile(r"-[0-9.,]")

    def error(self, message: str) -> NoReturn:
        _say(f"{message}; see {self.prog} --help")
        raise SystemExit(EXIT_INPUT)

    def _check_value(self, action: argparse.Action, value: Any) -> None:
        if action.choices is not None and value not in action.choices:
            known = [str(choice) for choice in action.choices]
            kind = "command" if action.dest == "command" else action.dest
            raise argparse.ArgumentError(
                None,
                f"no {kind} {value!r}{near_names(str(value), known)} (known: {', '.join(known)})",
            )


def main(argv: Sequence[str] | None = None) -> int:
    """Run the program and return its exit code; nothing a user does ends in a traceback.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments; those of the process when left out.
    """
    _forgive_console(sys.stdout)
    _forgive_console(sys.stderr)
    try:
        args = _parser().parse_args(argv)
        code: int = import_module(f".{args.command}", __name__).run(args)
        sys.stdout.flush()
    except SystemExit as end:  # argparse: --help, --version, a wrong argument
        return end.code if isinstance(end.code, int) else EXIT_INPUT
    except InputError as fault:
        for message in fault.messages:
            _say(message)
        return EXIT_INPUT
    except KeyboardInterrupt:
        _say("interrupted; nothing half-written is left behind")
        return EXIT_INTERRUPTED
    except BrokenPipeError:
        _abandon_output()  # the reader has gone
        return EXIT_CLOSED_PIPE
    except Exception as fault:
        if isinstance(fault, OSError) and fault.errno in FULL:
            _abandon_output()
            _say("what should be printed cannot be written: the disk is full; make room")
            return EXIT_INPUT
        if os.environ.get(TRACEBACK) == "1":
            raise
        _say(
            f"this is a fault of sweepset, not of what you gave: {type(fault).__name__}: {fault}; "
            f"set {TRACEBACK}=1 and run it again to see where"
        )
        return EXIT_FAILED
    return code


def _parser() -> argparse.ArgumentParser:
    from sweepset import __version__

    parser = _Parser(
        prog="sweepset",
        description="Choose, bias and hear JFET sets for phase shifters before soldering.",
        epilog=EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"sweepset {__version__}")
    commands = parser.add_subparsers(
        dest="command", metavar="COMMAND", required=True, title="commands"
    )
    for name in COMMANDS:
        module = import_module(f".{name}", __name__)
        command = commands.add_parser(
            name,
            help=module.HELP,
            description=module.HELP,
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        module.add_arguments(command)
    return parser


def _say(message: str) -> None:
    with suppress(OSError, ValueError):
        print(f"sweepset: {message}", file=sys.stderr, flush=True)


def _abandon_output() -> None:
    """Drop what is still to be printed; the interpreter must not complain of it at exit."""
    with suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _forgive_console(stream: IO[str]) -> None:
    """Let characters a console cannot show become question marks instead of faults."""
    reconfigure = getattr(stream, "reconfigure", None)
    if reconfigure is not None:
        with suppress(OSError, ValueError):
            reconfigure(errors="replace")
