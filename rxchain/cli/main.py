"""``rxchain``: finds the command, runs it, and turns its errors into one line and an exit status."""

from __future__ import annotations

import argparse
import sys
from importlib import import_module
from typing import NoReturn

from rxchain import __version__
from rxchain.errors import ReceiverError

_COMMANDS = {
    "receive": "receive every channel of a recording or a receiver at once",
    "identify": "find the emissions in a capture, name each and say how sure",
    "devices": "list the receivers and sound outputs that can be used here, and what is missing",
    "synthesize": "make a test capture with known truth from a scene file",
    "log": "list, show, verify, re-receive and export what was logged",
    "demo": "receive the shipped scene, with no hardware",
}


class _Parser(argparse.ArgumentParser):
    """Answers a bad request with one line."""

    def error(self, message: str) -> NoReturn:
        self.exit(2, f"{self.prog}: {message}; see {self.prog} --help\n")


def main(arguments: list[str] | None = None) -> int:
    """Runs the command that the arguments name; returns the exit status."""
    arguments = sys.argv[1:] if arguments is None else arguments
    parser = _Parser(prog="rxchain", description="A receiver for the amplitude-modulation family.", allow_abbrev=False)
    parser.add_argument("--version", action="version", version=f"rxchain {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, parser_class=_Parser)
    for name, job in _COMMANDS.items():
        command = commands.add_parser(name, help=job, description=job[0].upper() + job[1:] + ".", allow_abbrev=False)
        if arguments[:1] == [name]:  # the others' options are not asked for, and their modules stay unread
            import_module(f"rxchain.cli.{name}").add_arguments(command)
    chosen = parser.parse_args(arguments)
    try:
        status: int = import_module(f"rxchain.cli.{chosen.command}").run(chosen)
        return status
    except ReceiverError as error:
        print(f"rxchain {chosen.command}: {one_line(str(error))}", file=sys.stderr)
        return error.exit_status
    except KeyboardInterrupt:
        return 130
    except BrokenPipeError:
        # Whoever read the output has gone; what was to be written is on its way to nowhere.
        sys.stderr.close()
        return 0


def one_line(text: str) -> str:
    r"""The text on one line, free of control characters.

    >>> one_line("a\nb\x1b[31m")
    'a b?[31m'
    """
    joined = " ".join(text.split())
    return "".join(character if character.isprintable() else "?" for character in joined)


if __name__ == "__main__":
    sys.exit(main())
