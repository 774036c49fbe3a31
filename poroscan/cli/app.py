"""``poroscan``: joins the commands and turns what a user can mend into one line and an exit code.

Exit codes: 0 done; 1 done, and a batch fails its limits; 2 wrong use; 3 some input could not be read (the rest is done).
Command modules import nothing heavy at their top: ``--help`` must answer at once.
"""

from __future__ import annotations

import difflib
import importlib
import os
import re
import sys
from collections.abc import Sequence
from typing import Annotated

import typer

from poroscan import __version__
from poroscan.errors import InputError, PoroscanError

EXIT_DONE = 0
EXIT_OUTSIDE_LIMITS = 1
EXIT_WRONG_USE = 2
EXIT_UNREADABLE = 3
EXIT_STOPPED = 130

_STOPPED = "stopped; give the same command again, it continues where it stopped"

app = typer.Typer(
    name="poroscan",
    help="Pore structure of porous particles: from SEM cross-sections to a report.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

#: Commands in the order of ``--help``; each module holds one function ``command``, imports only light modules at its top
#: and may return an exit code.
COMMANDS: tuple[str, ...] = (
    "scan",
    "inspect",
    "report",
    "compare",
    "render",
    "phases",
    "simulate",
    "score",
    "match",
    "atlas",
)

for _name in COMMANDS:
    _module = importlib.import_module(f"poroscan.cli.{_name}")
    _sentence = " ".join((_module.command.__doc__ or "").split("\n\n")[0].split())
    app.command(_name, short_help=_sentence)(_module.command)  # in full: the library would cut it at 45 characters


def _version(wanted: bool) -> None:
    if wanted:
        print(f"poroscan {__version__}")
        raise typer.Exit


@app.callback()
def _top(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    pass


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code.

    Parameters
    ----------
    argv
        Arguments without the program name; None takes those of the process.
    """
    command = typer.main.get_command(app)
    try:
        code = command.main(args=None if argv is None else list(argv), prog_name="poroscan", standalone_mode=False)
    except PoroscanError as error:
        _complain(str(error))
        return EXIT_UNREADABLE if isinstance(error, InputError) else EXIT_WRONG_USE
    except typer.Exit as stop:
        code = stop.exit_code
    except (KeyboardInterrupt, typer.Abort):
        _complain(_STOPPED)
        return EXIT_STOPPED
    except BrokenPipeError:  # the reader of the output has gone, which is no error
        sys.stdout = open(os.devnull, "w")  # noqa: SIM115 (the interpreter flushes it when it ends)
        return EXIT_DONE
    except Exception as error:
        words = getattr(error, "format_message", None)  # a usage error of the command-line library
        if words is None:
            raise
        _complain(_usage_line(error, words()))
        return EXIT_WRONG_USE
    if code == EXIT_STOPPED:  # some versions of the command-line library turn an interrupt into this
        _complain(_STOPPED)
    return code if isinstance(code, int) else EXIT_DONE


def _complain(text: str) -> None:
    line = " ".join(text.split())
    print("poroscan: " + line.encode("utf-8", "backslashreplace").decode(), file=sys.stderr)


def _usage_line(error: Exception, words: str) -> str:
    """What is wrong with the command line and where help is, in one line; help itself where nothing was given."""
    context = getattr(error, "ctx", None)
    path = getattr(context, "command_path", "poroscan")
    if type(error).__name__ == "NoArgsIsHelpError":
        print(words, file=sys.stderr)
        words = "give a command"
    unknown = re.match(r"No such command '?([^'.]*)'?", words)
    if unknown:
        near = difflib.get_close_matches(unknown[1], COMMANDS, n=1)
        words = f"no command {unknown[1]!r}" + (f", did you mean {near[0]!r}?" if near else "")
    return f"{words.rstrip('.')}; see {path} --help"


def run() -> None:
    """Entry point of the installed command."""
    sys.exit(main())
