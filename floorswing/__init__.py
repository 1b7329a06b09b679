"""Floorswing: how far a small two-wheeled robot really turns, from a clip filmed from above.

The steps of the command line as functions, with the same defaults::

    from floorswing import compare, fit, measure

    measure(["cork.mp4"], "trial.toml", "out")
    result = fit("out/cork")
    comparison = compare(["out/cork", "out/lino"])
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from floorswing.comparing import compare as compare
    from floorswing.fitting import fit as fit
    from floorswing.measuring import measure as measure
    from floorswing.previewing import preview as preview
    from floorswing.report.making import write_report as write_report

__version__ = "0.1.0"

_HOMES = {
    "compare": "floorswing.comparing",
    "fit": "floorswing.fitting",
    "measure": "floorswing.measuring",
    "preview": "floorswing.previewing",
    "write_report": "floorswing.report.making",
}
"""Where each public function lives; loaded when first asked for, since some need a second to load."""

__all__ = ["__version__", "compare", "fit", "measure", "preview", "write_report"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
