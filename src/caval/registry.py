"""Formats, stages and detectors, found by entry point: ours, the plugins' and anyone else's by the same door.

In a package's ``pyproject.toml``::

    [project.entry-points."caval.formats"]
    edf = "caval_edf:FORMAT"              # a caval.registry.Format
    [project.entry-points."caval.stages"]
    waves = "caval.stages.waves:waves"    # a function decorated with @caval.registry.stage
    [project.entry-points."caval.detectors"]
    neurokit = "caval_neurokit.detectors:neurokit"   # a function decorated with @caval.registry.detector

A plugin that does not load warns and is skipped.
"""

from __future__ import annotations

import inspect
import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cache
from importlib.metadata import entry_points
from pathlib import Path
from typing import Any, TypeVar

from caval.errors import FileError, InputError, PluginError
from caval.recording import Recording
from caval.track import Track

__all__ = [
    "Detector", "Format", "Installed", "Stage", "detector", "detectors", "format_for", "formats", "stage", "stages",
]

Function = TypeVar("Function", bound=Callable[..., Any])


@dataclass(frozen=True)
class Format:
    """What a converter registers under ``caval.formats``.

    Attributes
    ----------
    name, description : str
    suffixes : tuple of str
        File endings, lower case, with the dot: ``(".edf", ".bdf")``.
    read : callable or None
        ``read(path) -> Recording``, lazy. Raises FileError.
    write : callable or None
        ``write(recording, path) -> paths written``: signals and all tracks.
    read_track : callable or None
        ``read_track(path) -> Track`` for a file that holds annotations.
    write_marked : callable or None
        ``write_marked(recording, track, directory, stem) -> paths written``: `track` beside (or, in formats that hold both,
        inside a copy of) the recording, by the file names of the contract.
    owns : callable or None
        ``owns(path) -> bool`` for files whose ending does not tell (a WFDB record name, an annotation file).
    """

    name: str
    description: str
    suffixes: tuple[str, ...] = ()
    read: Callable[[Path], Recording] | None = None
    write: Callable[[Recording, Path], tuple[Path, ...]] | None = None
    read_track: Callable[[Path], Track] | None = None
    write_marked: Callable[[Recording, Track, Path, str], tuple[Path, ...]] | None = None
    owns: Callable[[Path], bool] | None = None


@dataclass(frozen=True)
class Stage:
    """What a stage function declares.

    `needs` and `wants` are its positional parameters, without and with a default: roles (``cvp``: a Signal) or tables (``beats``:
    a DataFrame). `settings` are its keyword-only parameters. `gives` names the tables it returns. It runs block by block with
    `margin_s` of signal and rows on either side.
    """

    name: str
    function: Callable[..., Any]
    gives: tuple[str, ...]
    margin_s: float
    needs: tuple[str, ...] = ()
    wants: tuple[str, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class Detector:
    """A single-channel event detector: ``function(signal) -> times in seconds`` on a stretch of the channel in `role`."""

    name: str
    function: Callable[..., Any]
    role: str


@dataclass(frozen=True)
class Installed:
    """A registered object and where it came from."""

    name: str
    value: Any
    package: str
    version: str
    location: str


def stage(*, name: str, gives: tuple[str, ...], margin_s: float = 0.0) -> Callable[[Function], Function]:
    """Declare a plain function to be a stage; its parameters say what it needs (see `Stage`)."""

    def declare(function: Function) -> Function:
        needs: list[str] = []
        wants: list[str] = []
        settings: dict[str, Any] = {}
        for parameter in inspect.signature(function).parameters.values():
            if parameter.kind is parameter.KEYWORD_ONLY:
                settings[parameter.name] = parameter.default
            else:
                (needs if parameter.default is parameter.empty else wants).append(parameter.name)
        declared = Stage(name, function, gives, margin_s, tuple(needs), tuple(wants), settings)
        function.__caval__ = declared  # type: ignore[attr-defined]
        return function

    return declare


def detector(*, name: str, role: str) -> Callable[[Function], Function]:
    """Declare a function of a Signal that returns event times (s) to be a detector of the channel in `role`."""

    def declare(function: Function) -> Function:
        function.__caval__ = Detector(name, function, role)  # type: ignore[attr-defined]
        return function

    return declare


@cache
def _installed(group: str) -> dict[str, Installed]:
    """Everything registered under `group`, by name, ours first then by package name; loading errors warn."""
    found: dict[str, Installed] = {}
    entries = sorted(
        entry_points(group=group), key=lambda e: (e.dist is None or e.dist.name != "caval", e.dist.name if e.dist else "", e.name)
    )
    for entry in entries:
        package, version = (entry.dist.name, entry.dist.version) if entry.dist else ("?", "?")
        if entry.name in found:
            if found[entry.name].location != entry.value:
                warnings.warn(f"{group}: {entry.name!r} of {package} is hidden by that of {found[entry.name].package}", stacklevel=3)
            continue
        try:
            value = entry.load()
        except Exception as error:  # a stranger's plugin may fail in any way; caval goes on without it
            warnings.warn(f"{group}: {entry.name!r} of {package} did not load and is left out ({error})", stacklevel=3)
            continue
        found[entry.name] = Installed(entry.name, getattr(value, "__caval__", value), package, version, entry.value)
    return found


def formats() -> dict[str, Installed]:
    """Registered formats by name."""
    return _installed("caval.formats")


def stages() -> dict[str, Installed]:
    """Registered stages by implementation name; the default of a stage has the stage's own name."""
    return _installed("caval.stages")


def detectors() -> dict[str, Installed]:
    """Registered detectors by name."""
    return _installed("caval.detectors")


def pick(installed: Mapping[str, Installed], name: str, what: str) -> Any:
    """The registered object called `name`; PluginError lists what there is."""
    try:
        return installed[name].value
    except KeyError:
        raise PluginError(f"no {what} {name!r} is installed; there are: {', '.join(installed) or 'none'}") from None


def format_for(path: Path, can: str = "read") -> Format:
    """The format that can `read`, `write` or `read_track` a file, by its ending, else by asking each format.

    Raises
    ------
    FileError
        No installed format does.
    """
    able = [i.value for i in formats().values() if getattr(i.value, can) is not None]
    for candidate in able:
        if path.suffix.lower() in candidate.suffixes:
            return candidate
    for candidate in able:
        if can != "write" and candidate.owns is not None and candidate.owns(path):
            return candidate
    endings = ", ".join(sorted({s for f in able for s in f.suffixes}))
    if can != "write" and not path.exists():
        raise FileError(f"no such file: {path}")
    raise FileError(f"{path}: ending {path.suffix!r} is not one that caval can {can.replace('_', ' ')}; it can: {endings}")


def parse_setting(name: str, stage_: Stage, value: Any) -> Any:
    """A setting checked against the stage's keyword-only parameters."""
    if name not in stage_.settings:
        raise InputError(f"stage {stage_.name!r} has no setting {name!r}; it has: {', '.join(stage_.settings) or 'none'}")
    default = stage_.settings[name]
    fits = isinstance(value, type(default)) or (isinstance(default, float) and isinstance(value, int))
    if default is not None and (not fits or (isinstance(value, bool) and not isinstance(default, bool))):
        raise InputError(f"setting {stage_.name}.{name} = {value!r}: {type(default).__name__} expected (default {default!r})")
    return value
