"""``python -m floorswing``: the command line without the script that an installation makes."""

from floorswing.cli import cli

cli(prog_name="floorswing")
