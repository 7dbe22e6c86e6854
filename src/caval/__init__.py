"""caval: central venous pressure analysis for the biosignal frameworks a laboratory already uses.

Research software, not a medical device: what it reports describes a recording and defers to local protocols and licensed practice.

>>> import caval
>>> result = caval.mark(caval.demo_recording(minutes=0.5))
>>> sorted(result.marks["mark"].unique())
['a', 'c', 'v', 'x', 'y', 'z']
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from caval.api import convert, demo_recording, mark, read, write
    from caval.errors import CavalError, FileError, InputError, PluginError
    from caval.pipeline import Pipeline
    from caval.recording import Calibration, Channel, Recording, Signal
    from caval.result import Result
    from caval.track import Track

__version__ = "0.1.0"

_HOMES = {
    "api": ("convert", "demo_recording", "mark", "read", "write"),
    "errors": ("CavalError", "FileError", "InputError", "PluginError"),
    "pipeline": ("Pipeline",),
    "recording": ("Calibration", "Channel", "Recording", "Signal"),
    "result": ("Result",),
    "track": ("Track",),
}
_HOME_OF = {name: module for module, names in _HOMES.items() for name in names}

__all__ = [
    "Calibration", "CavalError", "Channel", "FileError", "InputError", "Pipeline", "PluginError", "Recording", "Result", "Signal", "Track",
    "convert", "demo_recording", "mark", "read", "write",
]


def __getattr__(name: str) -> Any:
    # Loaded on first use, so that `caval --help` does not wait for pandas.
    if name not in _HOME_OF:
        raise AttributeError(f"module 'caval' has no attribute {name!r}")
    return getattr(import_module(f"caval.{_HOME_OF[name]}"), name)
