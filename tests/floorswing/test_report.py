"""The report without a browser: what it says, what it keeps, what it refuses."""

from __future__ import annotations

import base64
import csv
import datetime
import hashlib
import io
import json
import math
import re
import shutil
import time
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import cv2
import numpy as np
import pytest
from click.testing import CliRunner, Result
from numpy.testing import assert_allclose

from calib.command import command_for
from floorswing.cli import cli
from floorswing.files import read_measurement, turns_csv
from floorswing.fitting import fit
from floorswing.report.evidence import collect, rests_of
from floorswing.report.figures import pictures_of
from floorswing.report.gather import expected_deg, gather, letter_of
from floorswing.report.making import write_report
from floorswing.report.repeat_figures import nearest_usual_deg, repeats_picture
from floorswing.report.sentences import named, signed, visible
from floorswing.report.sight import PICTURE, POSE, Sighter
from vision.frames import Clip, Frame
from vision.records import Event
from vision.redraw import pair_px, view_from

from .report_data import GAIN, HOSTILE, RIGHT_TO_LEFT, SIZE_PX, commands, redraw, write_folder

TODAY = datetime.date(2026, 12, 1)


@pytest.fixture(scope="module")
def trial(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the folder of a clip of ten turns: one stray, one flagged."""
    return write_folder(
        tmp_path_factory.mktemp("trial"),
        "cork",
        commands(16),
        flags={5: ("gap",)},
        stray_deg={11: 6.0},
        events=(Event(start_s=3.0, end_s=3.4, kind="handled", detail="lifted"),),
        warnings=("the light changed",),
    )


@pytest.fixture(scope="module")
def page(trial: Path, tmp_path_factory: pytest.TempPathFactory) -> str:
    out = tmp_path_factory.mktemp("page") / "report.html"
    write_report(trial, out, today=TODAY)
    return out.read_text(encoding="utf-8")


@pytest.fixture
def no_plots(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave the plots out where they are not what is tested: they take longest."""
    monkeypatch.setattr("floorswing.report.page.pictures_of", lambda subject: [])


class Reader(HTMLParser):
    """Collects tags with their attributes, and the text outside style and script."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self._mute = 0
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        self._mute += tag in ("style", "script")
        if tag not in ("a", "bdi", "strong", "span"):
            self.words.append(" ")

    def handle_endtag(self, tag: str) -> None:
        self._mute -= tag in ("style", "script")

    def handle_data(self, data: str) -> None:
        if not self._mute:
            self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join("".join(self.words).split())

    def files(self) -> dict[str, str]:
        found = {}
        for tag, attributes in self.tags:
            if tag == "a" and attributes.get("download"):
                href = attributes["href"] or ""
                found[str(attributes["download"])] = base64.b64decode(href.split("base64,")[1]).decode()
        return found


def test_the_first_words_are_the_answer_of_the_fit(trial: Path, page: str):
    result = fit(trial)
    wheel = command_for(result.fit, 90.0).wheel_deg
    lead = re.search(r'<p class="lead">(.*?)</p>', page, flags=re.DOTALL)
    assert lead is not None
    said = Reader(lead[1]).text
    assert f"+{wheel.value:.1f}" in said
    assert "To turn shuttle 2 by 90 degrees on cork tile" in said
    band = command_for(result.fit, 90.0)
    half = float(re.search(r"±([\d.]+) degrees", said)[1])  # type: ignore[index]
    assert half == pytest.approx(0.5 * (band.high_deg - band.low_deg), rel=0.05)


def test_the_table_gives_each_usual_angle_in_each_direction(page: str):
    text = Reader(page).text
    for angle in ("45°", "90°", "180°", "360°"):
        assert f"+{angle}" in text
        assert f"\u2212{angle}" in text
    assert "* Extrapolated: only commands of 187.5 to 375 wheel degrees were tried." in text


def test_what_spoils_confidence_is_said(page: str):
    doubts = page.split("What spoils confidence", 1)[1].split("</div>", 1)[0]
    said = Reader(doubts).text
    assert "cork: the light changed." in said
    assert "Flagged gap: turn 5" in said
    assert "handled (1)" in said
    assert re.search(r"Not in the fit: turn 11\s*, since it strays by", said)


@pytest.mark.usefixtures("no_plots")
def test_a_clean_trial_has_nothing_that_spoils_confidence(tmp_path: Path):
    folder = write_folder(tmp_path, "clean", commands(16), clip=True)
    written = write_report(folder, tmp_path / "r.html", today=TODAY)
    assert "Nothing was found that spoils confidence" in written.path.read_text(encoding="utf-8")


def test_strays_and_flagged_turns_come_first_in_the_gallery(page: str):
    keys = re.findall(r'class="card[^"]*" id="card-([\w-]+)"', page)
    assert keys[:2] == ["A1-11", "A1-5"]
    assert len(keys) == 16
    assert keys[2:] == [f"A1-{n}" for n in range(1, 17) if n not in (5, 11)]


def test_the_files_inside_are_those_of_the_folder(trial: Path, page: str):
    files = Reader(page).files()
    for name in ("turns.csv", "events.csv", "heading.csv"):
        assert files[f"cork-{name}"] == (trial / name).read_text(encoding="utf-8")
    kept, inside = json.loads((trial / "measurement.json").read_text()), json.loads(files["cork-measurement.json"])
    assert inside == kept
    assert json.loads(files["cork-fit.json"])["both"]["gain_deg_per_wheel_deg"]["value"] == pytest.approx(
        fit(trial).fit.gain().value
    )
    rows = list(csv.DictReader(io.StringIO(files["cork-turns.csv"])))
    assert len(rows) == 16


def test_everything_needed_to_do_it_again_is_there(trial: Path, page: str):
    text = Reader(page).text
    clip = read_measurement(trial).source
    assert clip.sha256 in text
    assert hashlib.sha256(Path(str(clip.path)).read_bytes()).hexdigest() == clip.sha256
    for command in ("floorswing measure", "floorswing fit", "floorswing report"):
        assert command in text
    assert "is no longer there; this is what was recorded of it" in text


@pytest.mark.usefixtures("no_plots")
def test_the_trial_file_is_shown_as_it_was_written(tmp_path: Path):
    from floorswing.trial import read_trial

    folder = write_folder(tmp_path, "a", commands(8))
    text = (
        '# a note of ours\n[robot]\nname = "shuttle 2"\nwheel_diameter_mm = 64\nmarker_side_mm = 40\n'
        "inner_track_mm = 118\ntyre_width_mm = 20\n[floor]\n"
        f'surface = "cork tile"\n[commands]\nwheel_deg = {commands(8)}\n'
    )
    (tmp_path / "a.toml").write_text(text, encoding="utf-8")
    assert read_trial(tmp_path / "a.toml").as_dict() == read_measurement(folder).trial.as_dict()
    page = write_report(folder, tmp_path / "r.html").path.read_text(encoding="utf-8")
    assert "# a note of ours" in page
    (tmp_path / "a.toml").write_text(text.replace("64", "65"), encoding="utf-8")
    page = write_report(folder, tmp_path / "r.html").path.read_text(encoding="utf-8")
    assert "says something else now" in page
    assert "# a note of ours" not in page


def test_the_page_asks_for_nothing_and_runs_only_its_own_script(page: str):
    reader = Reader(page)
    policy = next(a["content"] or "" for tag, a in reader.tags if tag == "meta" and a.get("http-equiv"))
    assert policy.startswith("default-src 'none';")
    script = re.search(r"<script>(.*?)</script>", page, flags=re.DOTALL)
    assert script is not None
    digest = base64.b64encode(hashlib.sha256(script[1].encode()).digest()).decode()
    assert f"script-src 'sha256-{digest}'" in policy
    for tag, attributes in reader.tags:
        for name, value in attributes.items():
            assert not name.startswith("on"), (tag, name)
            if name in ("src", "href", "xlink:href", "action", "srcset", "poster"):
                assert (value or "").startswith(("#", "data:")), (tag, value)
    outside = re.sub(r"base64,[A-Za-z0-9+/=]+", "", page)
    assert "@import" not in outside
    assert set(re.findall(r"https?://[^\s\"'<)]+", outside)) <= {
        "http://www.w3.org/2000/svg",
        "http://www.w3.org/1999/xlink",
    }
    assert all(target.startswith("#") for target in re.findall(r"url\(([^)]*)", outside))


def test_no_two_things_have_one_id_and_every_link_inside_leads_somewhere(page: str):
    ids = [attributes["id"] for _, attributes in Reader(page).tags if attributes.get("id")]
    assert len(ids) == len(set(ids))
    for _, attributes in Reader(page).tags:
        for name in ("href", "xlink:href"):
            target = attributes.get(name) or ""
            if target.startswith("#"):
                assert target[1:] in ids, target


def test_every_picture_says_in_words_what_it_shows(page: str):
    pictures = [a for tag, a in Reader(page).tags if tag == "svg" and a.get("role") == "img"]
    assert len(pictures) > 8 + 2 * 16
    assert all(len(a.get("aria-label") or "") > 20 for a in pictures)


def test_hostile_text_is_shown_as_text(tmp_path: Path):
    detail = "$\\frac{1}{0}$ {{ 7 * 7 }} </pre><script>"
    folder = write_folder(
        tmp_path,
        "a",
        commands(8),
        robot=HOSTILE,
        surface=RIGHT_TO_LEFT + "\x00\x1b[31m" + "very long " * 400,
        flags={3: ("</td><script>alert(2)</script>",)},
        warnings=("<b onmouseover=alert(3)>bold</b>\u2028\x07",),
        events=(Event(start_s=1.0, end_s=1.2, kind="<iframe src=x>", detail=detail),),
        factors={"<note>": "</table><script>alert(4)</script>"},
    )
    page = write_report(folder, tmp_path / "r.html", today=TODAY).path.read_text(encoding="utf-8")
    reader = Reader(page)
    assert [tag for tag, _ in reader.tags if tag == "script"] == ["script"]
    assert not {tag for tag, _ in reader.tags} & {"img", "iframe", "b", "note"}
    assert HOSTILE in reader.text
    assert "{{ 7 * 7 }}" in reader.text
    assert "\x00" not in page
    assert "\x1b" not in page
    assert "\x07" not in page
    lead = page.split('class="lead">', 1)[1].split("</p>", 1)[0]
    assert len(Reader(lead).text) < 700
    assert "<bdi>" in lead


@pytest.mark.parametrize("name", ["$x$", "a\nb", "\ud800", "x" * 5000, "", "\u202e"])
@pytest.mark.usefixtures("no_plots")
def test_no_name_breaks_a_page(tmp_path: Path, name: str):
    folder = write_folder(tmp_path, "a", commands(6), robot=name or " ", surface=name or "?", clip=False)
    written = write_report(folder, tmp_path / "r.html")
    Reader(written.path.read_text(encoding="utf-8"))


def test_names_are_escaped_shortened_and_kept_from_turning_the_text():
    assert named("<a>") == "<bdi>&lt;a&gt;</bdi>"
    assert len(named("x" * 100)) == 60 + len("<bdi></bdi>")
    assert visible("a\x00\x1bb\n") == "a\ufffd\ufffdb\n"
    assert signed("it strays by -6.1, follow-up of A-1") == "it strays by \u22126.1, follow-up of A-1"


def test_stills_show_the_outlines_on_the_squares(trial: Path):
    """The clip's squares are drawn from the same poses: inside the outlines the still is black, around them white."""
    one = read_measurement(trial, with_track=True)
    evidence = collect(one, Path(str(one.source.path)))
    assert evidence.missing == ""
    assert len(evidence.stills) == 17
    for turn in one.turns:
        after = evidence.stills[evidence.after[turn.turn]]
        assert after.heading_deg == turn.end_heading_deg
        assert after.drawn_from == POSE
        picture = cv2.imdecode(np.frombuffer(base64.b64decode(after.jpeg), np.uint8), cv2.IMREAD_GRAYSCALE)
        assert picture.shape == (after.side_px, after.side_px)
        inside, rim = np.zeros_like(picture), np.zeros_like(picture)
        for quad in after.outlines:
            points = np.array(quad)
            middle = points.mean(axis=0)
            cv2.fillConvexPoly(inside, np.round(middle + 0.9 * (points - middle)).astype(np.int32), 1)
            cv2.polylines(rim, [np.round(middle + 1.16 * (points - middle)).astype(np.int32)], True, 1)
        assert picture[inside == 1].mean() < 40
        assert np.quantile(picture[rim == 1], 0.1) > 180
        fore, aft = (np.array(quad).mean(axis=0) for quad in after.outlines)
        drawn_deg = math.degrees(math.atan2(aft[1] - fore[1], fore[0] - aft[0]))
        assert (drawn_deg - after.heading_deg + 180.0) % 360.0 - 180.0 == pytest.approx(0.0, abs=0.3)


def test_before_and_after_are_the_rests_beside_the_turn(trial: Path):
    one = read_measurement(trial, with_track=True)
    rests, before, after = rests_of(one)
    track = one.track
    assert track is not None
    for turn in one.turns:
        assert track.time_s[rests[before[turn.turn]].last] <= turn.start_s + 0.15
        assert track.time_s[rests[after[turn.turn]].first] >= turn.end_s - 0.15
    assert all(after[n] == before[n + 1] for n in range(1, len(one.turns)))


@pytest.mark.usefixtures("no_plots")
def test_a_clip_that_moved_is_found_where_it_is_said_to_be(trial: Path, tmp_path: Path):
    one = read_measurement(trial)
    place = Path(str(one.source.path))
    shutil.copytree(trial, tmp_path / "cork")
    document = json.loads((tmp_path / "cork" / "measurement.json").read_text())
    document["clip"]["path"] = str(tmp_path / "gone" / place.name)
    (tmp_path / "cork" / "measurement.json").write_text(json.dumps(document))
    (without,) = write_report(tmp_path / "cork", tmp_path / "r.html").without_pictures
    assert "is no longer at" in without
    page = (tmp_path / "r.html").read_text(encoding="utf-8")
    assert "is no longer at" in page
    assert 'class="card' not in page
    assert write_report(tmp_path / "cork", tmp_path / "r.html", clips=place.parent).without_pictures == ()
    other = tmp_path / "other"
    other.mkdir()
    (other / place.name).write_bytes(b"something else")
    (without,) = write_report(tmp_path / "cork", tmp_path / "r.html", clips=other).without_pictures
    assert "is not the clip that was measured" in without


@pytest.mark.usefixtures("no_plots")
def test_a_folder_that_keeps_no_view_says_so(trial: Path, tmp_path: Path):
    shutil.copytree(trial, tmp_path / "cork")
    document = json.loads((tmp_path / "cork" / "measurement.json").read_text())
    del document["plane"]["redraw"]
    (tmp_path / "cork" / "measurement.json").write_text(json.dumps(document))
    (without,) = write_report(tmp_path / "cork", tmp_path / "r.html").without_pictures
    assert "measure the clip again" in without


@pytest.mark.usefixtures("no_plots")
def test_too_few_turns_are_said_and_shown(tmp_path: Path):
    folder = write_folder(tmp_path, "two", [187.5, -187.5])
    page = write_report(folder, tmp_path / "r.html").path.read_text(encoding="utf-8")
    text = Reader(page).text
    assert "No relation between command and turn could be found" in text
    assert "2 usable turns; at least 3 are needed" in text
    assert page.count('class="card') == 2


@pytest.mark.usefixtures("no_plots")
def test_a_direction_never_driven_is_not_invented(tmp_path: Path):
    folder = write_folder(tmp_path, "one way", [187.5] * 6)
    text = Reader(write_report(folder, tmp_path / "r.html").path.read_text(encoding="utf-8")).text
    assert text.count("not driven, so not known") == 4
    assert "nothing is known of the other direction" in text


def test_a_fit_made_with_strays_kept_is_taken_as_it_is(trial: Path, tmp_path: Path):
    shutil.copytree(trial, tmp_path / "cork")
    fit(tmp_path / "cork", tmp_path / "cork" / "fit.json", keep_strays=True)
    (subject,) = gather([tmp_path / "cork"])
    assert "strays were kept" in subject.fit_note
    assert not any(one.is_stray for one in subject.seen)
    fit(tmp_path / "cork", tmp_path / "cork" / "fit.json")
    (subject,) = gather([tmp_path / "cork"])
    assert subject.fit_note == ""
    (tmp_path / "cork" / "turns.csv").write_text(
        turns_csv(read_measurement(tmp_path / "cork").turns[:12]), encoding="utf-8"
    )
    (subject,) = gather([tmp_path / "cork"])
    assert "these turns were fitted again" in subject.fit_note


def test_what_the_fit_expects_is_its_own_relation(trial: Path):
    """The residuals that the fit itself keeps are those that the page shows."""
    (subject,) = gather([trial])
    assert subject.result is not None
    used = {turn for _, turn in subject.result.used}
    shown = [one.along_deg for one in subject.seen if one.turn.turn in used]
    assert_allclose(shown, subject.result.fit.residuals_deg, atol=1e-9)
    assert expected_deg(subject.result.fit, 100.0, 0.0) == pytest.approx(100.0 * GAIN, abs=0.5)
    assert math.isnan(expected_deg(subject.result.fit, math.nan, 0.0))


@pytest.mark.usefixtures("no_plots")
def test_several_clips_of_one_trial_are_one_subject_and_surfaces_are_compared(tmp_path: Path):
    a = write_folder(tmp_path / "1", "a", commands(8), clip=False)
    b = write_folder(tmp_path / "2", "b", commands(8), seed=7, clip=False)
    c = write_folder(tmp_path / "3", "c", commands(12), surface="lino", seed=9, clip=False)
    one, other = gather([a, b, c])
    assert [len(one.measurements), len(one.seen), one.letter] == [2, 16, "A"]
    assert [one.surface, other.surface, other.letter] == ["cork tile", "lino", "B"]
    assert len({seen.key for seen in (*one.seen, *other.seen)}) == 28
    page = write_report([a, b, c], tmp_path / "r.html").path.read_text(encoding="utf-8")
    text = Reader(page).text
    assert "Comparison" in text
    assert "cork tile and lino" in text
    assert page.count('class="record"') == 3
    assert "different" in text or "same within the margin" in text or "cannot tell yet" in text


def test_the_verdict_is_that_of_the_comparison(tmp_path: Path):
    """Two seeds of one law turn alike; a third with six per cent less does not."""
    from floorswing.report.comparing import compared

    driven = commands(16)
    same = [write_folder(tmp_path / str(n), "a", driven, surface=f"floor {n}", seed=n, clip=False) for n in (1, 2)]
    other = write_folder(tmp_path / "3", "a", [0.94 * w for w in driven], surface="floor 3", seed=3, clip=False)
    document = json.loads((other / "measurement.json").read_text())
    document["trial"]["commands"]["wheel_deg"] = driven
    (other / "measurement.json").write_text(json.dumps(document))
    table = (other / "turns.csv").read_text()
    for size in (187.5, 375.0):
        table = table.replace(f"{0.94 * size:g},", f"{size:g},")
    (other / "turns.csv").write_text(table)
    found = compared(gather([*same, other]), [0, 0, 0])
    assert len(found.answer) == 2
    said = [Reader(str(sentence)).text for sentence in found.answer]
    assert said[0].startswith("floor 2 (B) turns like floor 1 (A) within 1 degree:")
    assert said[1].startswith("floor 3 (C) turns 5.")
    assert "less far than floor 1 (A)" in said[1]
    assert [picture.name for picture in found.pictures] == ["side-by-side", "differences"]
    assert len(found.sentences) >= 6


@pytest.mark.usefixtures("no_plots")
def test_consistency_is_told_in_words_and_a_table(trial: Path, tmp_path: Path):
    from floorswing.consistency_report import consistency_sentences

    (subject,) = gather([trial])
    assert subject.consistency is not None
    page = write_report(trial, tmp_path / "r.html", today=TODAY).path.read_text(encoding="utf-8")
    part = page.split('<section class="consistency"', 1)[1].split("</section>", 1)[0]
    text = Reader("<section" + part).text.replace("\u00a0", " ").replace("\u2212", "-")
    for sentence in consistency_sentences(subject.consistency):
        assert sentence.replace("%", " %") in text
    assert part.count("<tr>") == 1 + len(subject.consistency.cells)


def test_all_kinds_of_plots_are_there(trial: Path):
    (subject,) = gather([trial])
    pictures = pictures_of(subject)
    names = [picture.name.split("-")[0] for picture in pictures]
    assert set(names) == {"relation", "tyre", "budget", "repeats", "order", "start", "heading", "path"}
    for picture in pictures:
        assert picture.svg.startswith("<svg")
        assert "<metadata>" not in picture.svg
        if picture.name.split("-")[0] not in ("tyre", "budget"):
            assert 'data-turn="A1-11"' in picture.svg, picture.name


def test_repeats_are_held_against_the_angle_that_the_trial_wants(tmp_path: Path):
    folder = write_folder(tmp_path, "a", [187.5] * 6, factors={"wanted_deg": "88"}, clip=False)
    (subject,) = gather([folder])
    repeats = repeats_picture(subject)
    assert repeats is not None
    assert re.search(r"\+88° is [12]\.\d\d° less", repeats.svg)


def test_the_same_folder_gives_the_same_page(trial: Path, tmp_path: Path, page: str):
    written = write_report(trial, tmp_path / "again.html", today=TODAY)
    assert written.path.read_text(encoding="utf-8") == page


def test_usual_angles():
    assert nearest_usual_deg(91.3) == 90.0
    assert nearest_usual_deg(-47.0) == 45.0
    assert nearest_usual_deg(75.0) is None
    assert [letter_of(n) for n in (0, 25, 26, 701, 702)] == ["A", "Z", "AA", "ZZ", "AAA"]


def test_sixty_turns_stay_small_enough_to_mail(tmp_path: Path):
    folder = write_folder(tmp_path, "long", commands(60), stray_deg={23: 6.0})
    started_s = time.process_time()
    written = write_report(folder, tmp_path / "r.html")
    assert time.process_time() - started_s < 10.0  # s of one core; the machine may be busy with other tests
    assert written.size < 4_000_000
    assert written.path.read_text(encoding="utf-8").count("<symbol") == 61


def run(*arguments: object) -> Result:
    return CliRunner().invoke(cli, ["report", *map(str, arguments)])


@pytest.mark.usefixtures("no_plots")
def test_the_command_writes_and_says_so(trial: Path, tmp_path: Path):
    result = run(trial, "--out", tmp_path / "r.html")
    assert result.exit_code == 0, result.output
    assert result.stdout.startswith("16 turns; 0.")
    assert f"Written to {tmp_path / 'r.html'}" in result.stdout
    assert result.stderr == ""


@pytest.mark.parametrize("what", ["nothing", "empty", "file", "out is a folder", "out is nowhere"])
def test_wrong_use_is_one_line_and_exit_code_2(trial: Path, tmp_path: Path, what: str):
    (tmp_path / "empty").mkdir()
    (tmp_path / "file").write_text("x")
    arguments: dict[str, tuple[object, ...]] = {
        "nothing": (tmp_path / "no such",),
        "empty": (tmp_path / "empty",),
        "file": (tmp_path / "file",),
        "out is a folder": (trial, "--out", tmp_path / "empty"),
        "out is nowhere": (trial, "--out", tmp_path / "no such" / "r.html"),
    }
    result = run(*arguments[what])
    assert result.exit_code == 2
    assert "Traceback" not in result.output
    assert len(result.stderr.splitlines()) == 1


@pytest.mark.usefixtures("no_plots")
def test_clips_of_one_name_are_told_apart(tmp_path: Path):
    a = write_folder(tmp_path / "1", "clip", commands(8), stray_deg={4: 8.0}, clip=False)
    b = write_folder(tmp_path / "2", "clip", commands(8), seed=8, clip=False)
    (subject,) = gather([a, b])
    assert [one.name for one in subject.measurements] == ["clip", "clip-2"]
    assert [one.key for one in subject.seen if one.is_stray] == ["A1-4"]


def with_codes(quads: np.ndarray, size_px: tuple[int, int]) -> np.ndarray:
    """Return a picture with the robot's two printed markers at these corners."""
    picture = np.full(size_px[::-1], 200, np.uint8)
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_APRILTAG_36h11)
    printed = np.array([[-0.5, -0.5], [159.5, -0.5], [159.5, 159.5], [-0.5, 159.5]], np.float32)
    for marker_id, quad in enumerate(quads):
        code = cv2.aruco.generateImageMarker(dictionary, marker_id, 160, borderBits=1)
        map_ = cv2.getPerspectiveTransform(printed, quad.astype(np.float32))
        code = cv2.GaussianBlur(code, (0, 0), 1.0)
        cv2.warpPerspective(code, map_, size_px, picture, cv2.INTER_AREA, cv2.BORDER_TRANSPARENT)
    return picture


def test_frames_of_a_moved_camera_are_drawn_from_what_is_seen_in_them(trial: Path):
    one = read_measurement(trial, with_track=True)
    moved = replace(one, events=(Event(start_s=0.1, end_s=0.2, kind="camera moved", detail=""),))
    quads = 1.2 * pair_px(view_from(redraw(), SIZE_PX), np.array([33.0]), np.zeros(1), np.zeros(1))[0] - 60.0
    sight = Sighter(moved)(Frame(0, 0.0, with_codes(quads, SIZE_PX), True), 33.0)
    assert sight is not None
    assert sight.drawn_from == PICTURE
    assert np.abs(sight.outlines_px - quads).max() < 1.5  # px; found by contours
    fore, aft = sight.outlines_mm.mean(axis=1)
    assert math.degrees(math.atan2(*(fore - aft)[::-1])) == pytest.approx(33.0, abs=1.0)
    assert np.hypot(*(fore - aft)) == pytest.approx(120.0, abs=2.0)


def test_where_nothing_is_seen_nothing_is_drawn(trial: Path):
    one = read_measurement(trial, with_track=True)
    moved = replace(one, events=(Event(start_s=0.1, end_s=0.2, kind="camera moved", detail=""),))
    with Clip(Path(str(one.source.path))) as clip:
        frame = next(clip.frames())
        assert Sighter(moved)(frame) is None  # its squares carry no codes
        assert Sighter(one)(frame) is not None
