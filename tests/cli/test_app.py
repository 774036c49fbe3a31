from __future__ import annotations

import subprocess
import sys

import pytest

from poroscan import __version__
from poroscan.cli.app import COMMANDS, main
from poroscan.errors import InputError, PoroscanError, SettingsError


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"poroscan {__version__}\n"


def test_help_names_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    out = capsys.readouterr().out
    assert all(name in out for name in COMMANDS)
    assert "..." not in out.split("Commands:")[1]  # what a command does is said in full


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_has_help(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([command, "--help"]) == 0
    assert f"poroscan {command}" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["scn"], "no command 'scn', did you mean 'scan'?; see poroscan --help"),
        (["scan"], "see poroscan scan --help"),
        (["scan", "x"], "'--out'; see poroscan scan --help"),
        (["scan", "x", "--ot", "y"], "o such option: --ot"),
        (["scan", "x", "--out", "y", "--workers", "many"], "--workers"),
        (["scan", "x", "--out", "y", "--pixel-size", "-1"], "pixel_size_um must be a positive number of micrometres"),
        (["scan", "x", "--out", "y", "--view", "side"], "[segment] view: input should be 'auto'"),
        (["scan", "x", "--out", "y", "--recipe", "/no/recipe.toml"], "recipe /no/recipe.toml: No such file"),
        (["report", "/no/run"], "/no/run is not a run folder"),
    ],
)
def test_wrong_use_is_one_line_and_code_two(
    arguments: list[str], message: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(arguments) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert captured.err.count("\n") == 1
    assert captured.err.startswith("poroscan: ")
    assert message in captured.err


@pytest.mark.parametrize(
    ("error", "code"), [(InputError("no file"), 3), (SettingsError("no key"), 2), (PoroscanError("two\nlines"), 2)]
)
def test_what_a_user_can_mend_is_one_line(
    error: PoroscanError, code: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def broken(*_: object, **__: object) -> None:
        raise error

    monkeypatch.setattr("poroscan.batch.recipe.make_recipe", broken)
    assert main(["scan", "x", "--out", "y"]) == code
    assert capsys.readouterr().err == f"poroscan: {' '.join(str(error).split())}\n"


def test_defect_traces_back(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("poroscan.batch.recipe.make_recipe", lambda **_: 1 / 0)
    with pytest.raises(ZeroDivisionError):
        main(["scan", "x", "--out", "y"])


def test_interrupt(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    def interrupted(**_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("poroscan.batch.recipe.make_recipe", interrupted)
    assert main(["scan", "x", "--out", "y"]) == 130
    assert "stopped" in capsys.readouterr().err


HEAVY = ["numpy", "scipy", "pandas", "skimage", "matplotlib", "numba", "jinja2", "tifffile", "pyarrow", "rich"]


@pytest.mark.parametrize("arguments", [["--help"], ["scan", "--help"], ["--version"]])
def test_help_loads_nothing_heavy(arguments: list[str]) -> None:
    # newer versions of the command-line library check the options of a command with pydantic themselves
    heavy = HEAVY if arguments[0] == "scan" else [*HEAVY, "pydantic"]
    code = (
        f"import sys; from poroscan.cli.app import main; main({arguments!r});"
        f"print(*(m for m in {heavy!r} if m in sys.modules), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stderr.split() == []
