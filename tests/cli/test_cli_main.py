"""The program as a whole: commands, options, exit codes, messages."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from importlib.metadata import version
from pathlib import Path

import pytest
from cli_helpers import run

from compsize.cli.main import COMMANDS

SHARED = ("--workers", "--time-limit", "--json", "--quiet", "--overwrite")


def child(*arguments: str, **options: object) -> subprocess.CompletedProcess[str]:
    """The program in a process of its own."""
    command = [sys.executable, "-m", "compsize", *arguments]
    return subprocess.run(command, capture_output=True, text=True, check=False, **options)  # type: ignore[call-overload,no-any-return]


def test_version_is_that_of_the_package() -> None:
    """`python -m compsize --version` is the same program and prints the installed version."""
    done = child("--version")
    assert (done.returncode, done.stdout) == (0, f"compsize {version('compsize')}\n")


@pytest.mark.parametrize("arguments", [["--version"], ["--help"], ["size", "--help"]])
def test_quick_commands_load_nothing_heavy(arguments: list[str]) -> None:
    """What computes nothing starts without compiler, solver, tables of data or drawing."""
    script = (
        "import sys\nfrom compsize.cli.main import main\n"
        f"assert main({arguments}) == 0\n"
        "heavy = ('numpy', 'scipy', 'numba', 'cvxpy', 'pandas', 'matplotlib', 'jinja2', 'openpyxl')\n"
        "print([name for name in heavy if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


def test_checking_a_study_needs_no_compiler(tmp_path: Path) -> None:
    """`check` reads a study without loading compiler, solver or frames."""
    run("new", tmp_path / "study")
    script = (
        "import sys\nfrom compsize.cli.main import main\n"
        f"assert main(['check', {str(tmp_path / 'study')!r}]) == 0\n"
        "print([name for name in ('numba', 'cvxpy', 'pandas', 'matplotlib') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_takes_the_shared_options(command: str) -> None:
    """Every command explains itself and takes every shared option."""
    done = run(command, "--help")
    assert done.code == 0
    assert all(option in done.out for option in SHARED)


def test_help_names_every_command() -> None:
    """The help of the program lists the commands and the exit codes."""
    done = run("--help")
    assert done.code == 0
    assert all(f"  {command} " in done.out for command in COMMANDS)
    assert "70 internal fault" in " ".join(done.out.split())


def test_a_misspelt_command_is_a_usage_error() -> None:
    """An unknown command names the nearest one and exits with 2."""
    done = run("chekc", "study")
    assert done.code == 2
    assert "There is no command 'chekc'. Did you mean 'check'?" in done.err
    assert done.out == ""


@pytest.mark.parametrize(
    "arguments",
    [
        ["size", "study"],
        ["size", "study", "--out", "r", "--proof", "guess"],
        ["size", "study", "--out", "r", "--worker-count", "2"],
        ["margins", "study", "--out", "r", "--workers", "0"],
        ["margins", "study", "--out", "r", "--workers", "two"],
        ["margins", "study", "--out", "r", "--time-limit", "0"],
        ["margins", "study", "--out", "r", "--time-limit", "-5"],
        ["margins", "study", "--out", "r", "--time-limit", "nan"],
        ["margins", "study", "--out", "r", "--time-limit", "inf"],
        ["convert", "only-one"],
        ["report"],
    ],
)
def test_a_command_line_without_sense_is_a_usage_error(arguments: list[str]) -> None:
    """A missing, unknown or senseless option exits with 2 before anything is read."""
    done = run(*arguments)
    assert done.code == 2
    assert "Usage: compsize" in done.err
    assert done.out == ""


def test_an_internal_fault_is_short(monkeypatch: pytest.MonkeyPatch) -> None:
    """A fault of the program exits with 70, one message and no traceback."""
    monkeypatch.delenv("COMPSIZE_DEBUG", raising=False)
    monkeypatch.setattr("compsize.study.read_study.read_study", lambda path: 1 / 0)
    done = run("check", "study")
    assert done.code == 70
    assert "compsize: internal fault: ZeroDivisionError: division by zero (test_cli_main.py, line" in done.err
    assert "Traceback" not in done.err


def test_an_internal_fault_shows_its_traceback_on_demand(monkeypatch: pytest.MonkeyPatch) -> None:
    """With COMPSIZE_DEBUG=1 the traceback stands on standard error, and the exit code stays 70."""
    monkeypatch.setenv("COMPSIZE_DEBUG", "1")
    monkeypatch.setattr("compsize.study.read_study.read_study", lambda path: 1 / 0)
    done = run("check", "study")
    assert done.code == 70
    assert "Traceback (most recent call last)" in done.err


def test_stopped_from_the_keyboard(monkeypatch: pytest.MonkeyPatch) -> None:
    """An interrupt exits with 130 and says that nothing was written."""

    def interrupt(path: Path) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("compsize.study.read_study.read_study", interrupt)
    done = run("check", "study")
    assert done.code == 130
    assert "stopped; nothing was written" in done.err


def test_a_reader_that_goes_away_is_no_fault(tmp_path: Path) -> None:
    """Output into a closed pipe ends quietly with the exit code of the work done."""
    run("new", tmp_path / "study")
    command = [sys.executable, "-m", "compsize", "check", str(tmp_path / "study")]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        err = process.stderr.read()
        assert process.wait(60) == 0
    assert err == ""


def test_an_output_that_knows_few_letters(tmp_path: Path) -> None:
    """On a terminal without a letter of a title the answer is printed all the same, and JSON stays whole."""
    run("new", tmp_path / "study")
    toml = tmp_path / "study" / "study.toml"
    toml.write_text(toml.read_text().replace('title = "Starter study"', 'title = "Łódź 2030"'), encoding="utf-8")
    environment = os.environ | {"PYTHONIOENCODING": "ascii"}
    plain = child("check", str(tmp_path / "study"), env=environment)
    assert plain.returncode == 0
    assert "?" in plain.stdout.splitlines()[0]
    whole = child("check", str(tmp_path / "study"), "--json", env=environment)
    assert json.loads(whole.stdout)["title"] == "Łódź 2030"
