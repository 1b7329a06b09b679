"""Measured folders to a fitted relation: which turns count, the fit itself, and ``fit.json``."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from calib.consistency import Consistency, judge
from calib.fit import CONFIDENCE, Fit, direction_difference, fit_turns
from calib.geometry import Robot, contact_fraction, effective_track_mm
from calib.intervals import Estimate
from calib.models import SIDE_NAMES, Candidate, Model
from calib.scatter import LawShare
from calib.turns import Turns, reversals
from floorswing.consistency_report import consistency_document
from floorswing.errors import FileError
from floorswing.files import plain, read_json, read_measurement
from floorswing.records import MeasuredTurn, Measurement
from floorswing.turn_tables import table_of
from floorswing.writing import write_whole

FIT_FILE = "fit.json"
KIND = "floorswing fit"
FORMAT = 1

NOT_COUNTED = {
    "clipped": "the clip starts or ends in it",
    "two_pushes": "it was made in two pushes",
    "camera_moved": "the camera moved during it",
    "doubtful_match": "which command it answers is doubtful",
    "extra": "no command was given for it",
}
"""Flags with which a turn is left out of the fit, and why. All other flags count."""


@dataclass(frozen=True, kw_only=True, slots=True)
class LeftOut:
    """A turn that did not count, with the reason."""

    clip: str
    turn: int
    reason: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class FitResult:
    """A fit and where it came from.

    Parameters
    ----------
    fit : Fit
    robot : Robot
    robot_name, surface : str
    used : tuple of (clip, turn)
        The turns that the fit rests on.
    left_out : tuple of LeftOut
    stragglers : tuple of (clip, turn)
        Turns that lie far out and are in the fit nevertheless.
    consistency : Consistency or None
        How consistent the turns of the fit are, at 95 %.
    """

    fit: Fit
    robot: Robot
    robot_name: str
    surface: str
    used: tuple[tuple[str, int], ...]
    left_out: tuple[LeftOut, ...]
    stragglers: tuple[tuple[str, int], ...] = ()
    consistency: Consistency | None = None


def fit(
    folders: str | Path | Iterable[str | Path],
    out: str | Path | None = None,
    *,
    confidence: float = CONFIDENCE,
    keep_strays: bool = False,
) -> FitResult:
    """Fit the relation between commands and heading changes to measured clips of one trial.

    Parameters
    ----------
    folders : path-like or iterable of them
        Folders that ``measure`` wrote for clips, or folders of such folders.
    out : path-like, optional
        File to write the result to; nothing is written without it.
    confidence : float
        Of the intervals written.
    keep_strays : bool
        Whether turns far from all others stay in the fit; they are named either way.

    Raises
    ------
    FileError
        If a folder does not hold measurements, or they are of different robots or floors.
    calib.errors.CalibError
        If the turns do not allow a fit.
    """
    listed = [folders] if isinstance(folders, str | Path) else list(folders)
    measurements = [read_measurement(folder) for folder in measured_folders(listed)]
    result = fit_measurements(measurements, keep_strays=keep_strays)
    if out is not None:
        write_whole(Path(out), fit_json(result, confidence))
    return result


def measured_folders(folders: Sequence[str | Path]) -> list[Path]:
    """Return the folders of single clips: those given, or those inside the ones given."""
    found: list[Path] = []
    for folder in map(Path, folders):
        inner = [] if (folder / "turns.csv").exists() or not folder.is_dir() else sorted(folder.iterdir())
        clips = [path for path in inner if (path / "turns.csv").is_file()]
        if inner and not clips:
            raise FileError(f"{folder}: no measured clip in it; give a folder that `floorswing measure` wrote")
        found.extend(clips or [folder])
    return list(dict.fromkeys(found))


def fit_measurements(measurements: Sequence[Measurement], *, keep_strays: bool = False) -> FitResult:
    """Fit the turns of one or more measured clips together."""
    first = measurements[0].trial
    _check_one_trial(measurements)
    turns, given, left_out = usable_turns(measurements)
    fitted = fit_turns(turns, keep_strays=keep_strays)
    reasons = {one.index: one.reason for one in fitted.not_fitted}
    more = [LeftOut(clip=given[n][0], turn=given[n][1], reason=reason) for n, reason in reasons.items()]
    return FitResult(
        fit=fitted,
        robot=Robot(
            wheel_diameter_mm=first.robot.wheel_diameter_mm,
            inner_track_mm=first.robot.inner_track_mm,
            tyre_width_mm=first.robot.tyre_width_mm,
        ),
        robot_name=first.robot.name,
        surface=first.floor.surface,
        used=tuple(one for n, one in enumerate(given) if n not in reasons),
        left_out=(*left_out, *more),
        stragglers=tuple(given[n] for n in fitted.stragglers),
        consistency=judge(table_of(measurements, turns, given), fitted),
    )


def _check_one_trial(measurements: Sequence[Measurement]) -> None:
    for what, name in (("robot", "name"), ("floor", "surface")):
        found = {getattr(getattr(one.trial, what), name) for one in measurements}
        if len(found) > 1:
            raise FileError(f"the folders are of different {what}s ({', '.join(sorted(found))}); fit each by itself")


def usable_turns(
    measurements: Sequence[Measurement],
) -> tuple[Turns, list[tuple[str, int]], list[LeftOut]]:
    """Return the turns that count, in order, which they are, and those that do not with the reason."""
    rows: list[tuple[MeasuredTurn, float]] = []
    used: list[tuple[str, int]] = []
    left_out: list[LeftOut] = []
    for one in measurements:
        known = [n > 0 and "handled_before" not in turn.flags for n, turn in enumerate(one.turns)]
        state = reversals([turn.commanded_wheel_deg for turn in one.turns], slack_known=known)
        for turn, turned_back in zip(one.turns, state, strict=True):
            reason = why_not(turn)
            if reason is not None:
                left_out.append(LeftOut(clip=one.name, turn=turn.turn, reason=reason))
                continue
            rows.append((turn, float(turned_back)))
            used.append((one.name, turn.turn))
    turns = Turns(
        wheel_deg=np.array([turn.commanded_wheel_deg for turn, _ in rows]),
        heading_deg=np.array([turn.heading_change_deg for turn, _ in rows]),
        u_deg=np.array([turn.u_heading_change_deg for turn, _ in rows]),
        reversed_=np.array([state for _, state in rows]),
    )
    return turns, used, left_out


def why_not(turn: MeasuredTurn) -> str | None:
    """Return why a turn does not count in a fit, or None if it does."""
    for flag in turn.flags:
        if flag in NOT_COUNTED:
            return NOT_COUNTED[flag]
    if not math.isfinite(turn.commanded_wheel_deg):
        return NOT_COUNTED["extra"]
    if turn.commanded_wheel_deg == 0.0:
        return "its command is 0"
    if not (math.isfinite(turn.heading_change_deg) and math.isfinite(turn.u_heading_change_deg)):
        return "its heading change could not be measured"
    return None


def fit_json(result: FitResult, confidence: float = CONFIDENCE) -> str:
    """Return the text of ``fit.json``."""
    fitted = result.fit
    sides: dict[str, float | None] = {SIDE_NAMES[side].replace("-", "_"): side for side in fitted.sides}
    document: dict[str, Any] = {
        "kind": KIND,
        "format": FORMAT,
        "robot": {"name": result.robot_name, **plain(result.robot)},
        "surface": result.surface,
        "confidence": confidence,
        "model": plain(fitted.model),
        "models_tried": [{**plain(one.model), "aicc": _finite(one.aicc)} for one in fitted.candidates],
        "n_turns": fitted.n_turns,
        "difference_of_gains": _bounds(fitted.difference_if_any),
        "dead_band_if_any_wheel_deg": _bounds(fitted.dead_band_if_any),
        "offset_deg": _bounds(fitted.offset_deg(confidence)),
        "degrees_of_freedom": fitted.dof,
        "notes": list(fitted.notes),
        **{name: quantities(result, side, confidence) for name, side in sides.items()},
        "both": quantities(result, None, confidence),
        "turns_used": [{"clip": clip, "turn": turn} for clip, turn in result.used],
        "turns_left_out": plain(result.left_out),
        "stragglers": [{"clip": clip, "turn": turn} for clip, turn in result.stragglers],
        "consistency": None if result.consistency is None else consistency_document(result.consistency),
        "solution": {
            "sides": list(fitted.sides),
            "coefficients": fitted.coefficients.tolist(),
            "cov": fitted.cov.tolist(),
            "scatter_deg": fitted.scatter_deg,
            "size_deg": fitted.size_deg,
            "laws": [
                {
                    "law": one.law,
                    "weight": one.weight,
                    "scatter_deg": one.scatter_deg,
                    "coefficients": one.coefficients.tolist(),
                    "cov": one.cov.tolist(),
                }
                for one in fitted.laws
            ],
            "u_typical_deg": fitted.u_typical_deg,
            "tried_wheel_deg": list(fitted.tried_wheel_deg),
        },
    }
    return json.dumps(document, indent=2, ensure_ascii=False) + "\n"


def quantities(result: FitResult, side: float | None, confidence: float = CONFIDENCE) -> dict[str, Any]:
    """Return gain, dead band, effective track, contact fraction and repeatability of a direction, or of both."""
    fitted = result.fit
    gain = fitted.gain(side, confidence)
    track = effective_track_mm(gain, result.robot, fitted.dof)
    found: dict[str, Estimate | None] = {
        "gain_deg_per_wheel_deg": gain,
        "dead_band_wheel_deg": fitted.dead_band_wheel_deg(side, confidence),
        "effective_track_mm": track,
        "contact_fraction": contact_fraction(track, result.robot),
        "repeatability_deg": fitted.repeatability_deg(confidence),
        "gain_robust_to_strays": fitted.robust_gain(side, confidence),
    }
    return {name: _bounds(one) for name, one in found.items()}


def _bounds(one: Estimate | None) -> dict[str, float | None] | None:
    if one is None:
        return None
    return {
        "value": one.value,
        "u": one.u,
        "low": _finite(one.low),
        "high": _finite(one.high),
        "confidence": one.confidence,
    }


def _finite(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def read_fit(path: str | Path) -> Fit:
    """Read a fit back from ``fit.json``.

    Raises
    ------
    FileError
        If the file is missing or does not hold a fit.
    """
    path = Path(path)
    if path.is_dir():
        path = path / FIT_FILE
    if not path.exists():
        raise FileError(f"{path}: no such file; give the fit.json that `floorswing fit` wrote")
    document = read_json(path, KIND, "floorswing fit")
    try:
        return _fit_of(document)
    except (KeyError, TypeError, ValueError) as error:
        raise FileError(f"{path}: does not hold what `floorswing fit` writes ({error!r}); fit again") from error


def _fit_of(document: Mapping[str, Any]) -> Fit:
    solution = document["solution"]
    coefficients, cov = np.array(solution["coefficients"], float), np.array(solution["cov"], float)
    model = Model(**document["model"])
    sides = tuple(float(side) for side in solution["sides"])
    n_wanted = (len(sides) if model.separate_gains else 1) + model.dead_band + model.offset
    if coefficients.shape != (n_wanted,) or cov.shape != (n_wanted, n_wanted):
        raise ValueError(f"{n_wanted} coefficients expected")
    low, high = solution["tried_wheel_deg"]
    return Fit(
        model=model,
        sides=sides,
        coefficients=coefficients,
        cov=cov,
        dof=int(document["degrees_of_freedom"]),
        scatter_deg=float(solution["scatter_deg"]),
        size_deg=float(solution["size_deg"]),
        laws=tuple(_law_of(one) for one in solution["laws"]),
        n_turns=int(document["n_turns"]),
        u_typical_deg=float(solution["u_typical_deg"]),
        tried_wheel_deg=(float(low), float(high)),
        candidates=tuple(
            Candidate(
                model=Model(**{key: one[key] for key in ("separate_gains", "dead_band", "offset", "law")}),
                aicc=math.inf if one["aicc"] is None else float(one["aicc"]),
            )
            for one in document["models_tried"]
        ),
        notes=tuple(document["notes"]),
        residuals_deg=np.zeros(0),
        standardised=np.zeros(0),
    )


def _law_of(one: Mapping[str, Any]) -> LawShare:
    return LawShare(
        law=str(one["law"]),
        weight=float(one["weight"]),
        scatter_deg=float(one["scatter_deg"]),
        coefficients=np.array(one["coefficients"], float),
        cov=np.array(one["cov"], float),
    )


def sentences(result: FitResult) -> list[str]:
    """Return in plain sentences what the fit says."""
    fitted = result.fit
    gain, scatter = fitted.gain(), fitted.repeatability_deg()
    said = [
        f"{result.robot_name} on {result.surface}: {gain.value:.4f} degrees of heading per wheel degree, between "
        f"{gain.low:.4f} and {gain.high:.4f} ({gain.confidence:.0%}), from {fitted.n_turns} turns; single turns of "
        f"about {fitted.size_deg:.0f} degrees scatter by {scatter.value:.2f} degrees (standard deviation, between "
        f"{scatter.low:.2f} and {scatter.high:.2f}).",
        f"Model: {fitted.model}{_runner_up(fitted)}.",
    ]
    said.extend([*_band_sentence(fitted), *_direction_sentence(fitted), *_stray_sentences(result)])
    contact = contact_fraction(effective_track_mm(gain, result.robot, fitted.dof), result.robot)
    if contact is not None:
        said.append(contact_sentence(contact))
    said.extend(f"Note: {note}." for note in fitted.notes)
    return said


def _runner_up(fitted: Fit) -> str:
    """Return how the model stands among those tried, by the criterion."""
    ranked = [one for one in fitted.candidates if math.isfinite(one.aicc)]
    here = [one for one in ranked if one.model == fitted.model]
    if not here or len(ranked) < 2:
        return ""
    if here[0] is not ranked[0]:
        return f" (the criterion ranks {ranked[0].model} first, by {here[0].aicc - ranked[0].aicc:.1f})"
    return f" (next: {ranked[1].model}; its criterion is {ranked[1].aicc - ranked[0].aicc:.1f} worse)"


def _band_sentence(fitted: Fit) -> list[str]:
    band = fitted.dead_band_wheel_deg()
    if band is not None:
        return [f"At a reversal {band.value:.1f} wheel degrees are lost (between {band.low:.1f} and {band.high:.1f})."]
    if fitted.dead_band_if_any is not None:
        most = max(fitted.dead_band_if_any.high, 0.0)
        return [f"No dead band is seen; if there is one, it is at most {most:.1f} wheel degrees."]
    return []


def _direction_sentence(fitted: Fit) -> list[str]:
    apart, known = direction_difference(fitted), fitted.difference_if_any
    if apart is not None:
        more = "further" if apart[0].value > 0 else "less far"
        return [f"Counter-clockwise it turns {abs(apart[0].value):.2%} {more} than clockwise (p = {apart[1]:.2g})."]
    if known is not None:
        most = max(abs(known.low), abs(known.high))
        return [f"The directions are not told apart; their gains differ by at most {most:.1%}."]
    return []


def _stray_sentences(result: FitResult) -> list[str]:
    said = []
    if result.stragglers:
        named = ", ".join(f"turn {turn} of {clip}" for clip, turn in result.stragglers)
        said.append(f"Far out, but in the fit: {named}.")
    plain_gain, robust = result.fit.gain(), result.fit.robust_gain()
    if robust is not None and abs(robust.value - plain_gain.value) > 2.0 * plain_gain.u > 0.0:
        said.append(
            f"A fit that strays pull little at gives {robust.value:.4f} instead: a few turns decide, so look at them."
        )
    return said


def contact_sentence(contact: Estimate) -> str:
    """Return what a contact fraction means."""
    if contact.low > 1.0:
        return (
            f"The effective track lies beyond the tyres' outer edges (contact fraction {contact.value:.2f}): geometry "
            "alone cannot do that; something drags or slips."
        )
    if contact.high < 0.0:
        return (
            f"The effective track lies inside the tyres' inner edges (contact fraction {contact.value:.2f}): geometry "
            "alone cannot do that; check wheel diameter and track in the trial file."
        )
    return f"The tyres act at {contact.value:.2f} of their width from the inner edge (0 inner, 1 outer)."
