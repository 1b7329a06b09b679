"""The command line: a list of commands, loaded only when called, and the one place where errors become text.

Exit codes: 0 done, 1 finished but some clip failed, 2 the call or a file is wrong, 130 interrupted.
"""

from __future__ import annotations

import importlib
from typing import Any, NoReturn

import click

from floorswing import __version__
from floorswing.errors import FloorswingError, one_line

EXIT_SOME_FAILED = 1
EXIT_WRONG = 2
EXIT_INTERRUPTED = 130

COMMANDS: dict[str, str] = {
    "demo": "Run the main job on the bundled clips and compare with the truth.",
    "sheets": "Make the sheets to print: robot markers and floor cards in true scale.",
    "new": "Write a trial file, asking for what it needs.",
    "preview": "Say whether a set-up will do, from a few seconds or a photo.",
    "measure": "Measure the turns in clips filmed from above.",
    "fit": "Fit heading change against commanded wheel degrees.",
    "command": "Say what to command for wanted angles.",
    "compare": "Say whether surfaces, robots, speeds or days differ.",
    "plan": "Plan how many turns to drive, and in which order.",
    "report": "Write the report: answer, pictures, evidence and record on one page.",
    "logbook": "Keep trials over months, and ask them.",
}
"""Each command and its line in the list, so that the list needs none of them loaded."""


class _Told(click.ClickException):
    """An error of ours as click shows it: one line, exit code 2."""

    exit_code = EXIT_WRONG

    def show(self, file: Any = None) -> None:
        click.echo(f"Error: {one_line(self.message)}", err=True)


class CommandList(click.Group):
    """A group that imports ``floorswing.commands.<name>`` when the command is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Return the names in the order in which they are used."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Import the command and return it."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(f"floorswing.commands.{cmd_name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the list from the table, importing nothing."""
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; what a user can put right becomes one line and exit code 2."""
        try:
            return super().invoke(ctx)
        except (KeyboardInterrupt, click.Abort):
            click.echo("Interrupted: nothing was left half-written.", err=True)
            ctx.exit(EXIT_INTERRUPTED)
        except (click.UsageError, click.exceptions.Exit):
            raise
        except Exception as error:
            if not isinstance(error, _expected_errors()):
                raise
            _tell(error)


def _expected_errors() -> tuple[type[Exception], ...]:
    """Return the bases of everything that a user can put right."""
    from calib.errors import CalibError
    from vision.errors import VisionError

    return FloorswingError, VisionError, CalibError, click.ClickException


def _tell(error: Exception) -> NoReturn:
    message = error.format_message() if isinstance(error, click.ClickException) else str(error)
    raise _Told(message or "stopped") from error


@click.group(
    cls=CommandList, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.version_option(__version__, prog_name="floorswing")
def cli() -> None:
    """Measure how far a small two-wheeled robot really turns on this floor.

    Film it from above with two printed markers on its deck, measure the clip, and get the wheel degrees
    to command for a wanted angle, with the band in which turns land.
    """


def main() -> None:
    """Run the command line."""
    cli()
