"""The pages say what the code does."""

from __future__ import annotations

import re
from pathlib import Path
from xml.etree import ElementTree

import click
import pytest

from floorswing.cli import COMMANDS, cli
from floorswing.fitting import NOT_COUNTED

ROOT = Path(__file__).resolve().parent.parent
FILMING = (ROOT / "docs" / "filming.md").read_text(encoding="utf-8")
PAGES = [ROOT / "README.md", ROOT / "CHANGELOG.md", *sorted((ROOT / "docs").glob("*.md"))]


def source(*rooms: str) -> str:
    return "\n".join(path.read_text(encoding="utf-8") for room in rooms for path in (ROOT / room).rglob("*.py"))


def table_after(heading: str) -> list[str]:
    """Return the first column of the table below a heading."""
    part = FILMING.split(heading, 1)[1]
    rows = re.findall(r"^\| `([^`]+)` \|", part.split("\n##", 1)[0], flags=re.MULTILINE)
    assert rows
    return rows


def test_every_flag_is_explained_and_every_explained_flag_exists():
    code = source("vision", "floorswing")
    used = set(re.findall(r'flags\.append\("(\w+)"\)', code)) | set(re.findall(r'\*turn\.flags, "(\w+)"\)', code))
    used |= {"extra", "doubtful_match"}
    assert set(table_after("### Flags in `turns.csv`")) == used


def test_every_kind_of_advice_is_explained_and_exists():
    used = set(re.findall(r'kind="([a-z ]+)"', (ROOT / "floorswing" / "advice.py").read_text(encoding="utf-8")))
    assert set(table_after("### What `floorswing preview` advises")) == used


def test_whether_a_flagged_turn_counts_is_said_as_it_is():
    part = FILMING.split("### Flags in `turns.csv`", 1)[1].split("\n##", 1)[0]
    counts = dict(re.findall(r"^\| `(\w+)` \| (yes|no) \|", part, flags=re.MULTILINE))
    assert {flag for flag, answer in counts.items() if answer == "no"} == set(NOT_COUNTED)


def test_every_kind_of_event_is_explained_and_exists():
    code = source("vision") + (ROOT / "floorswing" / "matching.py").read_text(encoding="utf-8")
    explained = table_after("### Events in `events.csv`")
    for kind in explained:
        assert f'"{kind}"' in code, kind
    used = set(re.findall(r'kind="([^"]+)"', code)) | set(re.findall(r'return "([a-z ]+)", f"', code))
    assert used <= set(explained)


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_links_between_pages_lead_somewhere(page: Path):
    for target in re.findall(r"\]\(([^)#:]+)\)", page.read_text(encoding="utf-8")):
        assert (page.parent / target).exists(), target


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_every_command_and_option_named_in_a_page_exists(page: Path):
    context = click.Context(cli)
    for name, rest in re.findall(r"`?floorswing ([a-z]+)([^`\n|]*)", page.read_text(encoding="utf-8")):
        if name not in COMMANDS:
            assert not rest.strip().startswith("-"), name
            continue
        command = cli.get_command(context, name)
        assert command is not None
        parts = [command, *(command.commands.values() if isinstance(command, click.Group) else ())]
        known = {option for part in parts for parameter in part.params for option in parameter.opts}
        for option in re.findall(r"(?<![\w-])--[a-z-]+", rest):
            assert option in known | {"--help", "--version"}, (name, option)


def test_the_drawing_is_well_formed_and_says_what_it_shows():
    root = ElementTree.parse(ROOT / "docs" / "filming.svg").getroot()
    words = " ".join("".join(node.itertext()) for node in root.iter() if node.tag.endswith(("text", "title")))
    for word in ("FORE", "AFT", "cards", "counter-clockwise", "cannot fall"):
        assert word in words


def test_the_readme_names_every_command():
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    for name in COMMANDS:
        assert f"floorswing {name}" in readme, name
