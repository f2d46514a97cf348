"""Recordings of charged oil droplets in, tables of speed, radius and charge out.

The names below are imported when they are first used, so that importing the package stays cheap.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

# Bound now, since the submodule of the same name would otherwise take the function's place when it is imported.
from tracker.measure import measure

if TYPE_CHECKING:
    from physics.errors import FallriseError
    from tracker.bench import Bench, load_bench
    from tracker.evaluate import evaluate_result
    from tracker.keeping.store import Result, read_result
    from tracker.records import Settings
    from tracker.showing.plots import plot_recording, plot_track

_HOMES = {
    "Bench": "tracker.bench",
    "FallriseError": "physics.errors",
    "Result": "tracker.keeping.store",
    "Settings": "tracker.records",
    "evaluate_result": "tracker.evaluate",
    "load_bench": "tracker.bench",
    "plot_recording": "tracker.showing.plots",
    "plot_track": "tracker.showing.plots",
    "read_result": "tracker.keeping.store",
}

__all__ = [
    "Bench",
    "FallriseError",
    "Result",
    "Settings",
    "evaluate_result",
    "load_bench",
    "measure",
    "plot_recording",
    "plot_track",
    "read_result",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
