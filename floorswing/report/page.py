"""The page: everything gathered turned into one HTML text that needs nothing from anywhere."""

from __future__ import annotations

import base64
import datetime
import hashlib
import json
import math
import re
import shlex
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from importlib import resources
from typing import Any

from markupsafe import Markup

from calib.compare import MARGIN_DEG
from calib.fit import UNKNOWN_SLACK
from calib.intervals import Estimate
from floorswing import __version__
from floorswing.errors import TrialError
from floorswing.files import events_csv, heading_csv, measurement_json, plain, turns_csv
from floorswing.fitting import fit_json
from floorswing.numbers import decimals_for
from floorswing.records import Measurement
from floorswing.report.comparing import Comparison, compared, title_of
from floorswing.report.evidence import Evidence, Still
from floorswing.report.figures import pictures_of
from floorswing.report.gather import Seen, Subject
from floorswing.report.marks import Picture
from floorswing.report.sentences import (
    Side,
    answer,
    any_extrapolated,
    consistency_words,
    named,
    reservations,
    sides_of,
    signed,
    visible,
)
from floorswing.summary import COVERAGE
from floorswing.trial import read_trial

LONGEST_RECORD = 200_000
"""Characters of a trial file shown; nobody writes longer ones by hand."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Shelf:
    """The stills of one clip under the key by which the page knows the clip."""

    key: str
    name: Markup
    evidence: Evidence


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Chapter:
    """What the page shows of one subject."""

    letter: str
    surface: Markup
    heading: Markup
    answer: Sequence[Markup]
    sides: Sequence[Side]
    every_start: Sequence[Side]
    beyond: str
    doubts: Sequence[Markup]
    judged: Sequence[str]
    cells: Sequence[Mapping[str, str]]
    pictures: Sequence[Picture]
    rows: Sequence[Mapping[str, Any]]
    cards: Sequence[Mapping[str, Any]]
    shelves: Sequence[Shelf]
    several: bool
    drawn: str
    first: str


def page(
    subjects: Sequence[Subject],
    evidence: Mapping[str, Sequence[Evidence]],
    *,
    today: datetime.date,
    margin_deg: float = MARGIN_DEG,
) -> str:
    """Return the whole page.

    Parameters
    ----------
    subjects : sequence of Subject
    evidence : mapping of str to sequence of Evidence
        For each subject's letter the stills of its clips, in order.
    today : date
    margin_deg : float
        Difference of heading that does not matter where subjects are compared.
    """
    from jinja2 import Environment, StrictUndefined

    here = resources.files("floorswing.report")
    script = (here / "page.js").read_text(encoding="utf-8")
    environment = Environment(autoescape=True, undefined=StrictUndefined, trim_blocks=True, finalize=_shown)
    environment.globals.update(path=_path, arrow=_arrow, ray=_ray)
    template = environment.from_string((here / "page.html.j2").read_text(encoding="utf-8"))
    chapters = [_chapter(one, evidence[one.letter]) for one in subjects]
    comparison: Comparison | None = None
    if len(subjects) > 1:
        comparison = compared(subjects, [len(chapter.doubts) for chapter in chapters], margin_deg)
    return template.render(
        title=_title(subjects),
        heading=_heading(subjects),
        facts=_facts(subjects, today),
        rose=_rose(subjects[0]) if len(subjects) == 1 else Markup(""),
        style=Markup((here / "page.css").read_text(encoding="utf-8")),
        script=Markup(script),
        script_hash=base64.b64encode(hashlib.sha256(script.encode()).digest()).decode("ascii"),
        chapters=chapters,
        comparison=comparison,
        records=[record for one in subjects for record in _records(one)],
        colophon=f"Written by Floorswing {__version__} on {_day(today)}.",
    )


def _shown(value: object) -> object:
    """Return what the template prints for a value: no character that a page cannot hold, no lonely percent sign."""
    if isinstance(value, Markup):
        return value
    return visible(value).replace(" %", "\u00a0%") if isinstance(value, str) else value


def _day(day: datetime.date) -> str:
    return f"{day.day} {day:%B %Y}"


def _title(subjects: Sequence[Subject]) -> str:
    names = [f"{one.robot} on {one.surface}" for one in subjects]
    whole = "; ".join(names)
    return f"Turning trial: {whole if len(whole) <= 120 else whole[:119] + '…'}"


def _heading(subjects: Sequence[Subject]) -> Markup:
    if len(subjects) == 1:
        return title_of(subjects[0])
    robots = list(dict.fromkeys(one.robot for one in subjects))
    surfaces = list(dict.fromkeys(one.surface for one in subjects))
    return Markup("{} on {}").format(_joined(robots), _joined(surfaces))


def _joined(names: Sequence[str]) -> Markup:
    shown = [named(name, 40) for name in names[:4]]
    if len(names) > 4:
        shown = [*shown[:3], Markup("{} more").format(len(names) - 3)]
    return Markup(", ").join(shown[:-1]) + Markup(" and ") + shown[-1] if len(shown) > 1 else shown[0]


def _facts(subjects: Sequence[Subject], today: datetime.date) -> Markup:
    clips = [measurement.name for one in subjects for measurement in one.measurements]
    n_turns = sum(len(one.seen) for one in subjects)
    return Markup("{} turns in {} {} ({}) · reported {} · Floorswing {}").format(
        n_turns, len(clips), "clip" if len(clips) == 1 else "clips", _joined(clips), _day(today), __version__
    )


def _chapter(subject: Subject, evidence: Sequence[Evidence]) -> Chapter:
    shelves = [
        Shelf(key=f"{subject.letter}{n}", name=named(one.name), evidence=found)
        for n, (one, found) in enumerate(zip(subject.measurements, evidence, strict=True), start=1)
    ]
    missing = [
        (one.name, shelf.evidence.missing)
        for one, shelf in zip(subject.measurements, shelves, strict=True)
        if shelf.evidence.missing
    ]
    drawn = {still.drawn_from for shelf in shelves for still in shelf.evidence.stills.values()}
    cards = _cards(subject, shelves)
    return Chapter(
        letter=subject.letter,
        surface=named(subject.surface, 28),
        heading=title_of(subject),
        answer=answer(subject),
        sides=sides_of(subject),
        every_start=sides_of(subject, every_start=True),
        beyond=any_extrapolated(subject),
        doubts=reservations(subject, missing),
        judged=consistency_words(subject),
        cells=_cells(subject),
        pictures=pictures_of(subject),
        rows=[_row(one, subject) for one in subject.seen],
        cards=cards,
        shelves=shelves,
        several=len(subject.measurements) > 1,
        drawn=" or ".join(_DRAWN[one] for one in sorted(drawn)),
        first="Strays and flagged turns come first." if any(card["notes"] for card in cards) else "",
    )


_DRAWN = {
    "pose": "where the reported pose puts them, through the fitted plane, lens and mounting",
    "picture": "as found in this very picture, since the camera moved",
}


def _change(one: Seen) -> str:
    """Return the heading change with its expanded uncertainty."""
    return signed(f"{_number(one.turn.heading_change_deg, _decimals(one), sign=True)}° ± {_expanded(one)}°")


def _decimals(one: Seen) -> int:
    u = COVERAGE * one.turn.u_heading_change_deg
    return decimals_for(u) if u > 0.0 and math.isfinite(u) else 3


def _expanded(one: Seen) -> str:
    return _number(COVERAGE * one.turn.u_heading_change_deg, _decimals(one))


def _number(value: float, decimals: int, *, sign: bool = False) -> str:
    if not math.isfinite(value):
        return "–"
    rounded = round(value, decimals) + 0.0
    return signed(f"{rounded:+.{decimals}f}" if sign else f"{rounded:.{decimals}f}")


def _wheel(one: Seen) -> str:
    wheel = one.turn.commanded_wheel_deg
    return signed(f"{wheel:+g}") if math.isfinite(wheel) else "none"


def _notes(one: Seen) -> str:
    """Return what is unusual about a turn."""
    said = [flag.replace("_", " ") for flag in one.turn.flags]
    if one.left_out == UNKNOWN_SLACK:
        said.append("not in the fit: slack before it not known")
    elif one.left_out:
        said.append("not in the fit" if said else f"not in the fit: {one.left_out}")
    if one.straggles:
        said.append("far out")
    return signed(visible("; ".join(said)))


def _row(one: Seen, subject: Subject) -> dict[str, Any]:
    factors = "; ".join(f"{name} {value}" for name, value in one.turn.factors.items() if value)
    return {
        "key": one.key,
        "clip": named(one.clip, 24),
        "turn": one.turn.turn,
        "at": f"{one.turn.start_s:.2f}",
        "wheel": _wheel(one),
        "change": _number(one.turn.heading_change_deg, _decimals(one), sign=True),
        "expanded": _expanded(one),
        "expected": _number(one.expected_deg, 2, sign=True),
        "along": _number(one.along_deg, 2, sign=True),
        "notes": "; ".join(part for part in (_notes(one), visible(factors)) if part),
        "noted": one.standing < 3,
        "said": _said(one, subject),
    }


def _said(one: Seen, subject: Subject) -> str:
    """Return a turn in one sentence."""
    clip = f" of {one.clip}" if len(subject.measurements) > 1 else ""
    along = f"; {_number(one.along_deg, 2, sign=True)}° beyond the fit" if math.isfinite(one.along_deg) else ""
    notes = f"; {_notes(one)}" if _notes(one) else ""
    return visible(f"Turn {one.turn.turn}{clip}: commanded {_wheel(one)}, turned {_change(one)}{along}{notes}.")


def _cards(subject: Subject, shelves: Sequence[Shelf]) -> list[dict[str, Any]]:
    """Return the cards of the gallery, what needs looking at first."""
    by_key = {shelf.key: shelf for shelf in shelves}
    several = len(shelves) > 1
    cards = []
    for one in sorted(subject.seen, key=lambda seen: (seen.standing, seen.order)):
        shelf = by_key[one.key.rpartition("-")[0]]
        before, after = shelf.evidence.before.get(one.turn.turn, -1), shelf.evidence.after.get(one.turn.turn, -1)
        if not shelf.evidence.stills.keys() & {before, after}:
            continue
        start_deg = one.turn.start_heading_deg
        name = Markup("Turn {} of {}").format(one.turn.turn, shelf.name) if several else f"Turn {one.turn.turn}"
        cards.append(
            {
                "key": one.key,
                "turn": one.turn.turn,
                "name": name,
                "shelf": shelf,
                "before": before,
                "after": after,
                "start_deg": start_deg if math.isfinite(start_deg) else None,
                "said": f"{_wheel(one)} → {_change(one)}",
                "notes": _notes(one) if one.standing < 3 else "",
            }
        )
    return cards


def _cells(subject: Subject) -> list[dict[str, str]]:
    """Return the table of commands: how many, how true, how repeatable."""
    if subject.consistency is None:
        return []
    start = {None: "any", True: "reversed", False: "the same way"}
    return [
        {
            "wheel": signed(f"{cell.wheel_deg:+g}"),
            "start": start[cell.after_reversal],
            "n": str(cell.n),
            "mean": _number(cell.mean_deg.value, 2, sign=True),
            "off": _bounded(cell.trueness_deg, sign=True),
            "against": f"wanted {_number(cell.wanted_deg, 1, sign=True)}" if cell.wanted_is_given else "the fit",
            "spread": "–" if cell.repeatability_deg is None else _bounded(cell.repeatability_deg),
        }
        for cell in subject.consistency.cells
    ]


def _bounded(one: Estimate, *, sign: bool = False) -> str:
    """Return a value with its interval, if that has bounds."""
    value, low, high = (_number(part, 2, sign=sign) for part in (one.value, one.low, one.high))
    return f"{value} ({low} to {high})" if math.isfinite(one.low) and math.isfinite(one.high) else value


def _path(points: Sequence[tuple[float, float]]) -> str:
    return "M" + "L".join(f"{x:g} {y:g}" for x, y in points) + "Z"


def _arrow(still: Still) -> str:
    """Return the heading as an arrow from aft to fore about the middle of the pair."""
    (x, y), angle, reach = still.middle, math.radians(still.heading_deg), 0.485 * still.side_px
    along = math.cos(angle), -math.sin(angle)

    def at(forward: float, left: float) -> str:
        return f"{x + forward * along[0] + left * along[1]:.1f} {y + forward * along[1] - left * along[0]:.1f}"

    head = 0.06 * still.side_px
    tip = f"M{at(reach - head, 0.6 * head)}L{at(reach, 0.0)}L{at(reach - head, -0.6 * head)}"
    return f"M{at(-reach, 0.0)}L{at(reach, 0.0)}{tip}"


def _ray(still: Still, heading_deg: float) -> str:
    """Return a line from the middle along another heading."""
    (x, y), angle, reach = still.middle, math.radians(heading_deg), 0.46 * still.side_px
    return f"M{x:g} {y:g}L{x + reach * math.cos(angle):.1f} {y - reach * math.sin(angle):.1f}"


def _rose(subject: Subject) -> Markup:
    """Return a small ring of all headings in which the robot came to rest: the mark of the page."""
    ticks = []
    for degrees in range(0, 360, 10):
        long = 6.0 if degrees % 90 == 0 else 4.0 if degrees % 30 == 0 else 2.5
        ticks.append(f"M{_on_ring(degrees, 46.0)}L{_on_ring(degrees, 46.0 - long)}")
    ends = [one for one in subject.seen if math.isfinite(one.turn.end_heading_deg)]
    spokes = "".join(f"M0 0L{_on_ring(one.turn.end_heading_deg, 33.0)}" for one in ends)
    dots = Markup("").join(
        Markup('<circle class="end" data-turn="{}" cx="{}" cy="{}" r="2.4"/>').format(
            one.key, *_on_ring(one.turn.end_heading_deg, 33.0).split()
        )
        for one in ends
    )
    return Markup(
        '<svg class="rose" viewBox="-50 -50 100 100" role="img" aria-label="The {n} headings in which turns ended, on '
        'a ring of 360 degrees"><circle class="ring" r="46"/><path class="tick" d="{ticks}"/>'
        '<path class="spoke" d="{spokes}"/>{dots}</svg>'
    ).format(n=len(ends), ticks="".join(ticks), spokes=spokes, dots=dots)


def _on_ring(degrees: float, radius: float) -> str:
    angle = math.radians(degrees)
    return f"{radius * math.cos(angle):.2f} {-radius * math.sin(angle):.2f}"


def _records(subject: Subject) -> list[dict[str, Any]]:
    fit_text = fit_json(subject.result) if subject.result is not None else None
    return [_record(one, fit_text, len(subject.measurements)) for one in subject.measurements]


def _record(one: Measurement, fit_text: str | None, n_clips: int) -> dict[str, Any]:
    info = one.source.info
    files = [
        ("turns.csv", "text/csv", turns_csv(one.turns)),
        ("events.csv", "text/csv", events_csv(one.events)),
        ("measurement.json", "application/json", measurement_json(one)),
    ]
    if one.track is not None:
        files.insert(2, ("heading.csv", "text/csv", heading_csv(one.track)))
    if fit_text is not None:
        files.append(("fit.json", "application/json", fit_text))
    text, said = _trial_text(one)
    rate = f", {info.nominal_rate_hz:g} pictures a second" if info.nominal_rate_hz else ""
    length = f", {info.duration_s:.1f} s" if info.duration_s else ""
    return {
        "name": named(one.name),
        "facts": [
            ("clip", str(one.source.path)),
            ("SHA-256", one.source.sha256),
            ("picture", f"{info.width_px} × {info.height_px}, {info.codec}, {info.pixel_format}{rate}{length}"),
            ("robot", named(one.trial.robot.name, 400)),
            ("surface", named(one.trial.floor.surface, 400)),
            ("turns, commands", f"{len(one.turns)}, {len(one.trial.commands.wheel_deg)}"),
            ("measured with", ", ".join(f"{name} {version}" for name, version in one.versions.items())),
        ],
        "files": [_file(f"{one.name}-{name}", kind, content) for name, kind, content in files],
        "budget": [_budget_line(line) for line in one.budget],
        "events": one.events,
        "trial_text": text,
        "trial_said": said,
        "settings": json.dumps(
            plain({"settings": one.settings, "versions": one.versions, "plane": one.plane}),
            indent=1,
            ensure_ascii=False,
        ),
        "again": _again(one, n_clips),
    }


def _file(name: str, kind: str, content: str) -> dict[str, str]:
    return {
        "name": name,
        "kind": f"{kind};charset=utf-8",
        "data": base64.b64encode(content.encode("utf-8", "replace")).decode("ascii"),
    }


def _budget_line(line: Any) -> dict[str, str]:
    return {
        "name": line.name,
        "u": f"{line.u_deg:.5f}" if math.isfinite(line.u_deg) else "–",
        "evaluation": line.evaluation,
        "dof": f"{line.degrees_of_freedom:.0f}" if math.isfinite(line.degrees_of_freedom) else "∞",
        "basis": line.basis,
    }


def _trial_text(one: Measurement) -> tuple[str, str]:
    """Return the text of the trial file if it still says what was measured with, else what was recorded of it."""
    path = one.trial.path
    try:
        if read_trial(path).as_dict() == one.trial.as_dict():
            return path.read_text(encoding="utf-8-sig")[
                :LONGEST_RECORD
            ], f"{path}, as it stands now and as it was used."
        reason = "says something else now"
    except (TrialError, OSError):
        reason = "is no longer there"
    return _json(one.trial.as_dict()), f"{path} {reason}; this is what was recorded of it when the clip was measured."


def _json(value: object) -> str:
    """Return a value as JSON for people: lists of plain values on one line."""
    text = json.dumps(plain(value), indent=1, ensure_ascii=False)
    text = re.sub(r"\[\s+([^\[\]{}]*?)\s+\]", lambda found: f"[{' '.join(found[1].split())}]", text)
    return text[:LONGEST_RECORD]


def _again(one: Measurement, n_clips: int) -> str:
    out = one.folder.parent if one.folder is not None else "results"
    folder = one.folder if one.folder is not None else f"results/{one.name}"
    steps = [
        ["floorswing", "measure", one.source.path, "--trial", one.trial.path, "--out", out],
        ["floorswing", "fit", folder],
        ["floorswing", "report", folder],
    ]
    more = "\n# fit and report were given all clips of this subject together" if n_clips > 1 else ""
    return "\n".join(shlex.join(map(str, step)) for step in steps) + more
