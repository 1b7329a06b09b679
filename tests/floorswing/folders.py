"""Measured folders of simulated trials, written as `measure` writes them."""

from __future__ import annotations

import dataclasses
from pathlib import Path

from calib.table import TurnTable
from floorswing.files import write_measurement
from floorswing.records import ClipSource, MeasuredTurn, Measurement
from floorswing.trial import trial_from_text
from tests.calib.driven import driven
from tests.floorswing.conftest import TRIAL, clip_result


def measured(out: Path, name: str, seed: int, *, surface: str = "cork tile", robot: str = "shuttle 2", **say) -> Path:
    """Write the folder of one simulated clip and return it; what `driven` can be told can be said."""
    table = driven(seed, **say)
    result = clip_result([1.0])
    text = TRIAL.replace("cork tile", surface).replace("shuttle 2", robot)
    wheel = ", ".join(f"{one:g}" for one in table.turns.wheel_deg)
    measurement = Measurement(
        name=name,
        folder=None,
        source=ClipSource(path=Path(f"{name}.mp4"), sha256="0" * 64, info=result.clip),
        trial=trial_from_text(text.replace("190, 190, -190, -190", wheel), out / "trial.toml"),
        turns=tuple(_turn(table, n) for n in range(len(table))),
        events=(),
        track=result.track,
        plane={},
        budget=(),
        settings={},
        versions={},
    )
    folder = write_measurement(measurement, out).folder
    assert folder is not None
    return folder


def _turn(table: TurnTable, n: int) -> MeasuredTurn:
    like = dataclasses.asdict(clip_result([1.0]).turns[0])
    del like["degrees_of_freedom"], like["expanded_deg"]  # these are in measurement.json, not in the table
    start, change = float(table.start_heading_deg[n]), float(table.turns.heading_deg[n])
    like |= {
        "start_s": 3.0 * n + 1.0,
        "end_s": 3.0 * n + 2.0,
        "heading_change_deg": change,
        "u_heading_change_deg": 0.02,
        "start_heading_deg": start,
        "end_heading_deg": start + change,
        "centre_x_mm": float(table.x_mm[n]),
        "centre_y_mm": float(table.y_mm[n]),
        "flags": (),
    }
    return MeasuredTurn(
        turn=n + 1,
        commanded_wheel_deg=float(table.turns.wheel_deg[n]),
        factors={name: values[n] for name, values in table.factors.items()},
        **like,
    )

