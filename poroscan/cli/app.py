"""``poroscan``: joins the commands and turns what a user can mend into one line and an exit code.

Exit codes: 0 done; 1 done, and a batch fails its limits; 2 wrong use; 3 some input could not be read (the rest is done).
Command modules import nothing heavy at their top: ``--help`` must answer at once.
"""

from __future__ import annotations

import importlib
import sys
from collections.abc import Sequence

import typer

from poroscan.errors import InputError, PoroscanError

EXIT_DONE = 0
EXIT_OUTSIDE_LIMITS = 1
EXIT_WRONG_USE = 2
EXIT_UNREADABLE = 3

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
COMMANDS: tuple[str, ...] = ()

for _name in COMMANDS:
    _module = importlib.import_module(f"poroscan.cli.{_name}")
    app.command(_name)(_module.command)


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
        print(f"poroscan: {error}", file=sys.stderr)
        return EXIT_UNREADABLE if isinstance(error, InputError) else EXIT_WRONG_USE
    except typer.Exit as stop:
        return stop.exit_code
    except KeyboardInterrupt:
        print("poroscan: stopped", file=sys.stderr)
        return 130
    except Exception as error:
        show = getattr(error, "show", None)  # click's own usage errors
        if show is None:
            raise
        show()
        return EXIT_WRONG_USE
    return code if isinstance(code, int) else EXIT_DONE


def run() -> None:
    """Entry point of the installed command."""
    sys.exit(main())
