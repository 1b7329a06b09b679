"""The logbook: adding, asking, exporting, breaking off; with real processes where it is about processes."""

import datetime
import json
import shutil
import signal
import sqlite3
import subprocess
import sys
import textwrap
import time

import pytest
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from floorswing.cli import cli
from floorswing.fitting import fit
from floorswing.logbook import store
from floorswing.logbook.constants import comment, identifier
from floorswing.logbook.exchange import load, save
from floorswing.logbook.selection import Selection, parsed, some_trials, trials
from floorswing.logbook.store import LogbookError, add, digest_of, opened, texts_of
from tests.floorswing.folders import measured


@pytest.fixture(scope="module")
def folders(tmp_path_factory):
    """Return the folder of five clips: four days on cork, one on lino."""
    out = tmp_path_factory.mktemp("measured")
    for n in range(4):
        measured(out, f"day{n}", seed=n, blocks=2)
    measured(out, "lino", seed=9, blocks=2, surface="lino")
    return out


@pytest.fixture
def book(tmp_path, folders):
    """Return a logbook with the five clips, a day apart, and a fit."""
    path = tmp_path / "book.sqlite"
    for n in range(4):
        add(path, [folders / f"day{n}"], filmed_on=datetime.date(2026, 11, 1 + n))
    add(path, [folders / "lino"], filmed_on=datetime.date(2026, 11, 9))
    fit([folders / "day0", folders / "day1"], tmp_path / "fit.json")
    add(path, [tmp_path / "fit.json"])
    return path


def run(*words):
    return CliRunner().invoke(cli, [str(word) for word in words])


def dump(path):
    """Return all that was taken in."""
    with opened(path) as connection:
        rows = connection.execute("SELECT * FROM trial ORDER BY digest").fetchall()
        texts = connection.execute("SELECT file, content FROM text ORDER BY content").fetchall()
        turns = connection.execute("SELECT turn, heading_change_deg, counts FROM turn ORDER BY 1, 2").fetchall()
        fits = connection.execute("SELECT digest, robot, surface, fitted_on, added_at, content FROM fit").fetchall()
    return [row[1:] for row in rows], texts, turns, fits


def test_adding_twice_changes_nothing(book, folders):
    before = dump(book)
    again = add(book, [folders])
    assert not any(one.is_new for one in again)
    assert dump(book) == before


def test_what_was_taken_in_is_kept_byte_for_byte(book, folders):
    with opened(book) as connection:
        for one in trials(connection, Selection()):
            for name, text in texts_of(connection, one.id).items():
                assert text == (folders / one.name / name).read_text(encoding="utf-8")


def test_trials_are_selected_by_what_they_are(book):
    with opened(book) as connection:
        assert [one.name for one in trials(connection, parsed(["surface=lino"]))] == ["lino"]
        assert [one.name for one in trials(connection, parsed(["since=2026-11-02, until=2026-11-03"]))] == [
            "day1",
            "day2",
        ]
        assert len(trials(connection, parsed(["robot=shuttle 2"]))) == 5
        with pytest.raises(LogbookError, match="surfaces: cork tile, lino"):
            some_trials(connection, parsed(["surface=glass"]))


@pytest.mark.parametrize(
    ("text", "says"),
    [("surface", "accepted: robot="), ("since=soon", "year-month-day"), ("=x", "accepted"), ("robot=", "accepted")],
)
def test_a_bad_selection_gets_one_line(book, text, says):
    done = run("logbook", "--file", book, "list", text)
    assert done.exit_code == 2
    assert says in done.output
    assert len(done.output.splitlines()) == 1


def test_the_commands_say_what_is_there(book, folders, tmp_path):
    listed = run("logbook", "--file", book, "list")
    assert listed.exit_code == 0
    assert listed.output.count("cork tile") == 4
    rows = json.loads(run("logbook", "--file", book, "list", "--json").output)
    assert {row["name"] for row in rows} == {"day0", "day1", "day2", "day3", "lino"}
    trend = run("logbook", "--file", book, "trend", "surface=cork tile", "--of", "command", "--angle", "90")
    assert trend.exit_code == 0, trend.output
    assert "4 trials from 2026-11-01 to 2026-11-04" in trend.output
    assert "between days" in trend.output
    check = run("logbook", "--file", book, "check", folders / "day3")
    assert check.exit_code == 0, check.output
    assert "still valid" in check.output or "cannot tell" in check.output
    few = run("logbook", "--file", book, "trend", "surface=lino")
    assert few.exit_code == 2
    assert "at least 3" in few.output


def test_a_trend_has_the_values_that_the_fits_have(book):
    document = json.loads(run("logbook", "--file", book, "trend", "surface=cork tile", "--json").output)
    with opened(book) as connection:
        gains = [one.gain for one in trials(connection, parsed(["surface=cork tile"]))]
    assert_allclose(document["chart"]["values"], gains)
    assert_allclose(document["chart"]["centre"], sum(gains) / 4)


def test_everything_comes_back_from_open_files(book, tmp_path):
    with opened(book) as connection:
        assert save(connection, tmp_path / "saved") == (5, 1)
    other = tmp_path / "other.sqlite"
    with opened(other, must_exist=False) as connection:
        assert load(connection, tmp_path / "saved") == (5, 1)
        assert load(connection, tmp_path / "saved") == (0, 0)
    assert dump(other) == dump(book)


def test_saved_files_that_were_changed_are_refused(book, tmp_path):
    with opened(book) as connection:
        save(connection, tmp_path / "saved")
        turns = next((tmp_path / "saved" / "trials").iterdir()) / "turns.csv"
        turns.write_text(turns.read_text().replace("1", "2", 1))
    done = run("logbook", "--file", tmp_path / "other.sqlite", "load", tmp_path / "saved")
    assert done.exit_code == 2
    assert len(done.output.splitlines()) == 1


@settings(max_examples=8, deadline=None)
@given(
    note=st.text(st.characters(codec="utf-8", exclude_characters="\r\x00"), max_size=40),
    robot=st.sampled_from(["a", "\u03b2 2"]),
)
def test_any_note_survives_the_round_trip(tmp_path_factory, note, robot):
    out = tmp_path_factory.mktemp("round")
    folder = measured(out, "one", seed=3, blocks=1, robot=robot)
    for _ in range(2):
        add(out / "a.sqlite", [folder], note=note)
    with opened(out / "a.sqlite") as connection:
        save(connection, out / "saved")
    with opened(out / "b.sqlite", must_exist=False) as connection:
        load(connection, out / "saved")
    assert dump(out / "b.sqlite") == dump(out / "a.sqlite")


def test_digests_depend_on_every_text_and_its_name():
    assert digest_of({"a": "x", "b": "y"}) != digest_of({"a": "xb", "b": "y"})
    assert digest_of({"a": "x"}) != digest_of({"b": "x"})


def test_a_newer_or_foreign_file_is_refused_and_left_alone(book, tmp_path):
    connection = sqlite3.connect(book)
    connection.execute("PRAGMA user_version = 99")
    connection.close()
    assert "newer version" in run("logbook", "--file", book, "list").output
    other = tmp_path / "other.db"
    connection = sqlite3.connect(other)
    connection.execute("CREATE TABLE mine (x)")
    connection.close()
    before = other.read_bytes()
    with pytest.raises(LogbookError, match="no logbook"), opened(other):
        pass
    assert other.read_bytes() == before


def test_an_older_file_is_led_up_and_a_copy_kept(book, monkeypatch):
    before = dump(book)
    monkeypatch.setattr(store, "VERSION", 2)
    monkeypatch.setattr(store, "MIGRATIONS", {1: "CREATE TABLE extra (x); CREATE INDEX by_x ON extra (x)"})
    with opened(book) as connection:
        assert connection.execute("PRAGMA user_version").fetchone()[0] == 2
        assert connection.execute("SELECT count(*) FROM extra").fetchone()[0] == 0
    assert dump(book) == before
    copy = book.with_name(f"{book.name}.version-1")
    monkeypatch.setattr(store, "VERSION", 1)
    assert dump(copy) == before


def test_a_damaged_or_missing_file_gets_one_line(book, tmp_path):
    missing = run("logbook", "--file", tmp_path / "none.sqlite", "list")
    assert missing.exit_code == 2
    assert "no logbook there" in missing.output
    data = bytearray(book.read_bytes())
    data[:2000] = b"\x01" * 2000
    book.write_bytes(bytes(data))
    for side in ("-wal", "-shm"):
        book.with_name(book.name + side).unlink(missing_ok=True)
    damaged = run("logbook", "--file", book, "list")
    assert damaged.exit_code == 2
    assert "damaged" in damaged.output
    assert len(damaged.output.splitlines()) == 1


ADD = textwrap.dedent(
    """
    import sys
    from floorswing.logbook.store import add
    for folder in sys.argv[2:]:
        add(sys.argv[1], [folder])
        print(folder, flush=True)
    """
)


def test_two_processes_add_at_once(tmp_path, folders):
    path = tmp_path / "book.sqlite"
    names = [str(folders / f"day{n}") for n in range(4)] + [str(folders / "lino")]
    both = [subprocess.Popen([sys.executable, "-c", ADD, str(path), *names[k:], *names[:k]]) for k in (0, 2)]
    assert [one.wait(120) for one in both] == [0, 0]
    with opened(path) as connection:
        assert len(trials(connection, Selection())) == 5


def test_a_kill_loses_nothing_that_was_acknowledged(tmp_path, folders):
    names = [str(folders / f"day{n}") for n in range(4)] + [str(folders / "lino")]
    for round_ in range(3):
        path = tmp_path / f"book{round_}.sqlite"
        process = subprocess.Popen([sys.executable, "-c", ADD, str(path), *names], stdout=subprocess.PIPE, text=True)
        said = [process.stdout.readline().strip() for _ in range(1 + round_)]
        time.sleep(0.01 * round_)
        process.send_signal(signal.SIGKILL)
        said += [line.strip() for line in process.stdout.read().splitlines()]
        process.wait(30)
        process.stdout.close()
        with opened(path) as connection:
            assert connection.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
            kept = {one.name for one in trials(connection, Selection())}
        assert {name.rsplit("/", 1)[-1] for name in said if name} <= kept
        add(path, names)
        with opened(path) as connection:
            assert len(trials(connection, Selection())) == 5


def test_the_header_compiles_and_says_the_same(book, tmp_path):
    compiler = shutil.which("cc") or shutil.which("gcc") or shutil.which("clang")
    if compiler is None:
        pytest.skip("no C compiler on this machine")
    out = tmp_path / "out"
    done = run("logbook", "--file", book, "export", out, "--angle", "90", "--angle", "-45")
    assert done.exit_code == 0, done.output
    rows = json.loads((out / "commands.json").read_text())["commands"]
    groups = list(dict.fromkeys(identifier(f"{row['robot']}_on_{row['surface']}") for row in rows))
    loops = "\n".join(
        f"for (int i = 0; i < FLOORSWING_{name.upper()}_COUNT; i++) {{ floorswing_command c = floorswing_{name}[i];"
        ' printf("%.17g %d %.17g %.17g\\n", c.wanted_deg, c.after_reversal, c.wheel_deg, c.u_wheel_deg); }'
        for name in groups
    )
    source = tmp_path / "main.c"
    source.write_text(
        f'#include <stdio.h>\n#include "floorswing_commands.h"\nint main(void) {{\n{loops}\nreturn 0; }}\n'
    )
    binary = tmp_path / "main"
    flags = ["-std=c99", "-Wall", "-Wextra", "-Werror", "-pedantic", "-I", str(out)]
    subprocess.run([compiler, *flags, str(source), "-o", str(binary)], check=True)
    printed = subprocess.run([str(binary)], check=True, capture_output=True, text=True).stdout
    numbers = [[float(word) for word in line.split()] for line in printed.splitlines()]
    wanted = [[r["wanted_deg"], r["start"] == "reversed", r["wheel_deg"], r["u_wheel_deg"]] for r in rows]
    assert numbers == wanted
    space: dict = {}
    exec((out / "floorswing_commands.py").read_text(), space)
    assert [list(row[:4]) for name in groups for row in space[name.upper()]] == wanted
    header = (out / "floorswing_commands.h").read_text()
    assert "trials 1, 2, 3, 4" in header
    assert "2026-11-01 to 2026-11-04" in header


def test_hostile_names_stay_in_their_comments():
    assert "*/" not in comment("evil */ int x; /* \\ \n next")
    assert "\n" not in comment("a\nb")
    assert comment("\u05d0").isascii()
    assert identifier("2nd cart!") == "n_2nd_cart"
    assert identifier("") == "n_"


def test_stored_trials_are_compared_like_folders(book, folders):
    stored = run("compare", "--logbook", book, "log:surface=cork tile", "log:surface=lino", "--json")
    assert stored.exit_code == 0, stored.output
    groups = {one["name"]: one["n_turns"] for one in json.loads(stored.output)["groups"]}
    assert set(groups) == {"cork tile", "lino"}
    mixed = run("compare", "--logbook", book, "log:surface=cork tile", folders / "lino", "--json")
    assert json.loads(mixed.output)["groups"] == json.loads(stored.output)["groups"]
    none = run("compare", "--logbook", book, "log:surface=glass", "log:surface=lino")
    assert none.exit_code == 2
    assert "no trial matches" in none.output
