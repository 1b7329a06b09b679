"""The front door: the list of commands, the one place for errors, exit codes, and how fast it opens."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import click
import pytest
from click.testing import CliRunner

import floorswing
from calib.errors import NotEnoughTurns
from floorswing import cli as front
from floorswing.errors import FileError
from vision.errors import MarkersNotFound

FASTEST_OF = 5


def run(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, "-m", "floorswing", *arguments], capture_output=True, text=True, timeout=60)


def test_the_list_shows_every_command_in_its_own_words():
    result = CliRunner().invoke(front.cli, ["--help"])
    assert result.exit_code == 0
    context = click.Context(front.cli)
    folder = Path(front.__file__).parent / "commands"
    assert sorted(front.COMMANDS) == sorted(path.stem for path in folder.glob("[!_]*.py"))
    for name, line in front.COMMANDS.items():
        command = front.cli.get_command(context, name)
        assert command is not None
        assert command.get_short_help_str(limit=200) == line
        assert name in result.output
        assert line in " ".join(result.output.split())


@pytest.mark.parametrize("name", front.COMMANDS)
def test_every_command_explains_itself_and_each_of_its_options(name: str):
    result = CliRunner().invoke(front.cli, [name, "--help"])
    assert result.exit_code == 0
    command = front.cli.get_command(click.Context(front.cli), name)
    assert command is not None
    assert len(command.help or "") > 60
    for parameter in command.params:
        if isinstance(parameter, click.Option):
            assert parameter.help, parameter.name
        else:
            metavar = parameter.make_metavar(click.Context(command)).strip(".[]")
            assert metavar in (command.help or ""), parameter.name


def test_an_unknown_command_is_refused():
    result = CliRunner().invoke(front.cli, ["measur"])
    assert result.exit_code == 2
    assert "measur" in result.output


def test_version():
    result = run("--version")
    assert result.returncode == 0
    assert result.stdout.strip() == f"floorswing, version {floorswing.__version__}"


def test_version_and_list_load_no_numerical_library():
    code = (
        "import sys, floorswing.cli as c\n"
        "try: c.cli(sys.argv[1:])\n"
        "except SystemExit: pass\n"
        "print(sorted({'numpy', 'scipy', 'cv2', 'av'} & set(sys.modules)))"
    )
    for option in ("--version", "--help"):
        result = subprocess.run([sys.executable, "-c", code, option], capture_output=True, text=True, check=True)
        assert result.stdout.splitlines()[-1] == "[]"


def test_version_is_quick():
    """Under 0.25 s of processor time, the best of a few, less what the interpreter itself needs to start."""

    def seconds(*arguments: str) -> float:
        taken = []
        for _ in range(FASTEST_OF):
            started = time.perf_counter()
            subprocess.run([sys.executable, *arguments], capture_output=True, check=True)
            taken.append(time.perf_counter() - started)
        return min(taken)

    assert seconds("-m", "floorswing", "--version") - seconds("-c", "pass") < 0.25


@pytest.fixture
def failing(monkeypatch: pytest.MonkeyPatch):
    """Return a function that runs a command which raises what it is given."""

    def invoke(error: BaseException):
        @click.command()
        def command() -> None:
            raise error

        monkeypatch.setattr(front.CommandList, "get_command", lambda self, context, name: command)
        monkeypatch.setitem(front.COMMANDS, "failing", "Fail.")
        return CliRunner().invoke(front.cli, ["failing"])

    return invoke


@pytest.mark.parametrize(
    "error",
    [
        FileError("cork.mp4: no such\nfile"),
        MarkersNotFound("cork.mp4: no such file"),
        NotEnoughTurns("cork.mp4: no such file", n_seen=1, n_needed=2),
        click.ClickException("cork.mp4: no such file"),
    ],
)
def test_what_a_user_can_put_right_is_one_line_and_exit_code_2(failing, error: Exception):
    result = failing(error)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert result.stderr == "Error: cork.mp4: no such file\n"


def test_a_fault_of_ours_keeps_its_traceback(failing):
    result = failing(ZeroDivisionError("ours"))
    assert isinstance(result.exception, ZeroDivisionError)


def test_an_interruption_is_one_line_and_exit_code_130(failing):
    result = failing(KeyboardInterrupt())
    assert result.exit_code == 130
    assert result.stderr == "Interrupted: nothing was left half-written.\n"


def test_a_reader_that_goes_away_is_no_traceback():
    command = [sys.executable, "-m", "floorswing", "--help"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert b"Traceback" not in process.stderr.read()


def test_the_steps_are_functions_of_the_package():
    for name in floorswing.__all__:
        assert name in dir(floorswing)
        assert getattr(floorswing, name) is not None
    with pytest.raises(AttributeError, match="nonsense"):
        _ = floorswing.nonsense
