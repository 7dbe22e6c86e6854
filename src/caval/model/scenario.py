"""Scenarios: what is simulated, by name or from a TOML file.

::

    title = "Healthy adult"
    shows = "a above v, x and y; …"       # what its trace must show
    minutes = 3.0
    circulation = "healthy"               # a preset of caval.model.parameters
    [values]                              # changes to it, by dotted name
    "ra.e_rest" = 0.3
    [[rhythm]]                            # options of caval.model.rhythm; later ones begin at onset_s
    kind = "sinus"
    [[breathing]]                         # fields of caval.model.circulation.Breathing, and onset_s
    mode = "spontaneous"
    [line]                                # fields of caval.model.line.Line
    [[events]]                            # flush, zeroing, sampling, disconnection, clot, height_step, movement, diathermy
    kind = "flush"
    onset_s = 60
    duration_s = 1.5
    [[infusions]]
    onset_s = 60
    duration_s = 120
    volume_ml = 500
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

from caval.errors import FileError, InputError
from caval.model import events as happenings
from caval.model.circulation import Breathing, Infusion
from caval.model.events import Event
from caval.model.line import Line
from caval.model.parameters import Circulation, preset

__all__ = ["EVENTS", "Scenario", "load_scenario", "scenario_names"]

EVENTS: dict[str, type[Event]] = {
    "flush": happenings.Flush,
    "zeroing": happenings.Zeroing,
    "sampling": happenings.BloodSampling,
    "disconnection": happenings.Disconnection,
    "clot": happenings.Clot,
    "height_step": happenings.HeightStep,
    "movement": happenings.Movement,
    "diathermy": happenings.Diathermy,
}
"""Events by the kind that a scenario calls them."""


@dataclass(frozen=True)
class Scenario:
    """A scenario; see the module for what each part holds. `with_settings` changes single values."""

    name: str
    title: str = ""
    shows: str = ""
    minutes: float = 3.0
    circulation: str = "healthy"
    values: Mapping[str, float] = field(default_factory=dict)
    rhythm: Sequence[Mapping[str, Any]] = ({"kind": "sinus"},)
    breathing: Sequence[Mapping[str, Any]] = ({"mode": "spontaneous"},)
    line: Mapping[str, Any] = field(default_factory=dict)
    events: Sequence[Mapping[str, Any]] = ()
    infusions: Sequence[Mapping[str, float]] = ()
    ecg_noise_mv: float = 0.015

    def __post_init__(self) -> None:
        if not 0 < self.minutes <= 24 * 60:
            raise InputError(f"minutes = {self.minutes!r}: allowed are above 0 to {24 * 60} minutes")

    def model(self) -> Circulation:
        """The circulation, checked."""
        return preset(self.circulation).with_values(self.values)

    def schedule(self) -> list[dict[str, Any]]:
        """The rhythm's parts with their onsets."""
        return [{"onset_s": 0.0, **part} for part in self.rhythm]

    def breaths(self) -> list[tuple[float, Breathing]]:
        """Breathing by onset."""
        parts = [({k: v for k, v in part.items() if k != "onset_s"}, float(part.get("onset_s", 0.0))) for part in self.breathing]
        return [(onset, _build(Breathing, "breathing", values)) for values, onset in parts]

    def measuring(self) -> Line:
        """The line of the venous pressure."""
        return _build(Line, "line", self.line)

    def happenings(self) -> list[Event]:
        """The events within the record."""
        found = []
        for values in self.events:
            kind = str(values.get("kind", ""))
            if kind not in EVENTS:
                raise InputError(f"event kind {kind!r}: allowed are {', '.join(EVENTS)}")
            event = _build(EVENTS[kind], kind, {k: v for k, v in values.items() if k != "kind"})
            if event.onset_s + event.duration_s < self.minutes * 60.0:
                found.append(event)
        return found

    def gifts(self) -> list[Infusion]:
        """The infusions."""
        return [_build(Infusion, "infusions", values) for values in self.infusions]

    def with_settings(self, settings: Mapping[str, Any]) -> Scenario:
        """A copy with single values changed: ``{"rhythm.heart_rate": 90, "line.damping": 0.4, "ra.e_rest": 0.3, "minutes": 5}``.

        A name that begins with ``rhythm.`` or ``breathing.`` changes every part of it; one that is no field of the scenario is a
        parameter of the circulation.
        """
        parts: dict[str, Any] = {}
        for name, value in settings.items():
            head, dot, tail = name.partition(".")
            if head in ("rhythm", "breathing") and dot:
                parts[head] = tuple({**part, tail: value} for part in parts.get(head, getattr(self, head)))
            elif head == "line" and dot:
                parts["line"] = {**parts.get("line", self.line), tail: value}
            elif name in ("minutes", "ecg_noise_mv", "circulation"):
                parts[name] = value
            else:
                parts["values"] = {**parts.get("values", self.values), name: value}
        changed = replace(self, **parts)
        changed.check()
        return changed

    def check(self) -> None:
        """Build every part once, so that what cannot be is said before anything runs."""
        from caval.model.rhythm import schedule

        self.model()
        self.breaths()
        self.measuring()
        self.happenings()
        self.gifts()
        for part in self.schedule():
            schedule([{**part, "onset_s": 0.0}], 10.0)


def _build(kind: type[Any], what: str, values: Mapping[str, Any]) -> Any:
    known = [f.name for f in fields(kind)]
    for name in values:
        if name not in known:
            raise InputError(f"{what} has no {name!r}; it has: {', '.join(known)}")
    try:
        return kind(**{k: tuple(v) if isinstance(v, list) else v for k, v in values.items()})
    except TypeError as error:
        raise InputError(f"{what}: {error}") from None


@cache
def scenario_names() -> tuple[str, ...]:
    """Names of the scenarios that come with caval."""
    folder = files("caval.model") / "scenarios"
    return tuple(sorted(entry.name.removesuffix(".toml") for entry in folder.iterdir() if entry.name.endswith(".toml")))


def load_scenario(name: str | Path) -> Scenario:
    """The scenario of that name, or that a TOML file describes.

    Raises
    ------
    InputError
        No such name; a file that is no TOML, or has something a scenario has not.
    FileError
        A file that cannot be read.
    """
    if str(name) in scenario_names():
        text, stem = (files("caval.model") / "scenarios" / f"{name}.toml").read_text(encoding="utf-8"), str(name)
    elif str(name).endswith(".toml"):
        try:
            text, stem = Path(name).read_text(encoding="utf-8"), Path(name).stem
        except OSError as error:
            raise FileError(f"cannot read scenario {name}: {error.strerror or error}") from error
    else:
        raise InputError(f"no scenario {str(name)!r}; there are: {', '.join(scenario_names())}; or give a .toml file")
    try:
        content = tomllib.loads(text)
    except ValueError as error:
        raise InputError(f"scenario {name}: not a TOML file ({error})") from None
    known = [f.name for f in fields(Scenario) if f.name != "name"]
    for key in content:
        if key not in known:
            raise InputError(f"scenario {name} has {key!r}; a scenario has: {', '.join(known)}")
    parts: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in content.items()}
    scenario = Scenario(stem, **parts)
    scenario.check()
    return scenario
