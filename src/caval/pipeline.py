"""Orders stages by what they need and give, and runs them block by block. Reads like a recipe.

Blocks lie on a fixed grid from the start of the record, so the same record gives the same rows however it is run::

    core     |── 1800 s ─|── 1800 s ─|── …      a row belongs to the block whose core holds its time
    read   ──margin──|core|──margin──           what a stage sees of the signals and of the tables given so far
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd

from caval import registry, tables, units
from caval.errors import InputError
from caval.recording import Recording, Signal
from caval.registry import Stage
from caval.roles import PRESSURE_ROLES, assign_roles

__all__ = ["BLOCK_S", "DETECTORS", "STAGES", "Pipeline", "Progress"]

BLOCK_S = 1800.0
"""Core of a block, seconds: half an hour of three channels is some 10 MB, and the margins cost little. A multiple of DETECTOR_GRID_S."""
DETECTOR_GRID_S = 60.0
"""Detectors with thresholds of their own see one such stretch at a time, so that no threshold depends on the block."""
DETECTOR_MARGIN_S = 10.0

STAGES = ("anchors", "atrial", "quality", "waves", "measure", "delay", "rhythm")
"""Stages that run by default."""
DETECTORS = ("qrs", "upstroke")
"""Detectors whose candidates the anchors stage fuses by default."""

Progress = Callable[[str, float], None]
"""Called with the stage's name and the share done, 0 to 1."""


@dataclass(frozen=True)
class Pipeline:
    """Stages to run and how.

    Parameters
    ----------
    stages : sequence of str
        Stage names, in any order.
    choose : mapping of str to str
        Another implementation for a stage, by registered name: ``{"anchors": "their-name"}``.
    detectors : sequence of str
        Detectors whose events the ``candidates`` table holds.
    settings : mapping
        ``{"waves": {"setting": value}}``; a stage's keyword-only parameters.
    block_s : float
        Core length of a block in seconds, a multiple of 60.
    workers : int
        Threads over the blocks of a stage. Rows do not depend on it.

    Examples
    --------
    >>> import caval
    >>> tables = caval.Pipeline().run(caval.demo_recording(minutes=0.5))
    >>> sorted(tables)
    ['atria', 'beats', 'candidates', 'coupling', 'delay', 'marks', 'readings', 'rhythms', 'spans']
    """

    stages: Sequence[str] = STAGES
    choose: Mapping[str, str] = field(default_factory=dict)
    detectors: Sequence[str] = DETECTORS
    settings: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    block_s: float = BLOCK_S
    workers: int = 1

    def __post_init__(self) -> None:
        if self.block_s <= 0 or self.block_s % DETECTOR_GRID_S:
            raise InputError(f"block_s = {self.block_s!r}: a multiple of {DETECTOR_GRID_S:g} s is needed")
        for name in (*self.choose, *self.settings):
            if name not in self.stages:
                raise InputError(f"no stage {name!r} runs; stages that run are: {', '.join(self.stages)}")

    def run(
        self,
        recording: Recording,
        *,
        roles: Mapping[str, str] | None = None,
        unit_of: Mapping[str, str] | None = None,
        given: Mapping[str, pd.DataFrame] | None = None,
        start_s: float = 0.0,
        stop_s: float | None = None,
        progress: Progress | None = None,
    ) -> dict[str, pd.DataFrame]:
        """Every table the stages give, by name.

        Parameters
        ----------
        recording : Recording
        roles : mapping, optional
            Role to label; found from the labels by default (`caval.roles.assign_roles`).
        unit_of : mapping, optional
            The user's word for a channel's unit, label to unit.
        given : mapping, optional
            Tables that stand already (``beats`` from an annotation file, corrected ``marks``): stages that would give them do not run.
        start_s, stop_s : float
            Analyse this stretch, seconds of the record; times in the tables stay those of the record.
        progress : callable, optional

        Raises
        ------
        InputError
            No venous-pressure channel, an unknown unit, a need that nothing fills, an empty stretch.
        """
        roles = dict(roles) if roles is not None else assign_roles(recording)
        signals = _Signals(recording, roles, dict(unit_of or {}))
        end_s = recording.duration_s if stop_s is None else min(stop_s, recording.duration_s)
        if not start_s < end_s:
            raise InputError(f"nothing to analyse between {start_s:g} s and {end_s:g} s; the record has {recording.duration_s:g} s")
        done: dict[str, pd.DataFrame] = {name: table.copy() for name, table in (given or {}).items()}
        ordered = self._order(roles, done)
        reach = sum(stage.margin_s for stage in ordered)  # what stages see of one another's margins
        stretch = max(0.0, start_s - reach), min(end_s + reach, recording.duration_s)
        for stage in ordered:
            done |= self._run_stage(stage, signals, done, stretch, progress)
        return {
            name: tables.clip_spans(table, start_s, end_s) if name == "spans" else _within(name, table, start_s, end_s)
            for name, table in done.items()
        }

    def settings_used(self) -> dict[str, dict[str, Any]]:
        """Every setting of every stage that runs, the user's over the defaults."""
        chosen = {name: registry.pick(registry.stages(), self.choose.get(name, name), "stage") for name in self.stages}
        return {name: {**stage.settings, **self.settings.get(name, {})} for name, stage in chosen.items()}

    def _order(self, roles: Mapping[str, str], given: Mapping[str, pd.DataFrame]) -> list[Stage]:
        """Stages in an order in which every need is met when its turn comes; those whose gift is given are left out."""
        installed = registry.stages()
        waiting = [self._candidates(roles)] if "beats" not in given else []
        waiting += [replace(registry.pick(installed, self.choose.get(n, n), "stage"), name=n) for n in self.stages]
        waiting = [s for s in waiting if not set(s.gives) <= set(given)]
        have, ordered = set(given), []
        while waiting:
            pending = {gift for s in waiting for gift in s.gives}
            ready = [s for s in waiting if set(s.needs) <= have | set(roles) and not (set(s.wants) & pending - set(s.gives) - have)]
            if not ready:
                stuck = waiting[0]
                lacking = ", ".join(sorted(set(stuck.needs + stuck.wants) - have - set(roles)))
                raise InputError(f"stage {stuck.name!r} cannot run: nothing gives {lacking}")
            ordered.append(ready[0])
            have |= set(ready[0].gives)
            waiting.remove(ready[0])
        return ordered

    def _candidates(self, roles: Mapping[str, str]) -> Stage:
        """The detectors as a stage that gives the ``candidates`` table."""
        chosen = [registry.pick(registry.detectors(), name, "detector") for name in self.detectors]
        chosen = [d for d in chosen if d.role in roles]

        def candidates(**signals: Signal) -> pd.DataFrame:
            parts = [_detect(d, signals[d.role]) for d in chosen if d.role in signals]
            return pd.concat(parts, ignore_index=True) if parts else tables.empty("candidates")

        return Stage("candidates", candidates, ("candidates",), DETECTOR_MARGIN_S, wants=tuple(sorted({d.role for d in chosen})))

    def _run_stage(
        self, stage: Stage, signals: _Signals, done: Mapping[str, pd.DataFrame], stretch: tuple[float, float], progress: Progress | None
    ) -> dict[str, pd.DataFrame]:
        settings = {k: registry.parse_setting(k, stage, v) for k, v in self.settings.get(stage.name, {}).items()}
        blocks = list(_blocks(*stretch, self.block_s))

        def one(block: tuple[float, float]) -> tuple[float, float, tuple[pd.DataFrame, ...]]:
            seen = block[0] - stage.margin_s, block[1] + stage.margin_s
            inputs: dict[str, Any] = {}
            for name in (*stage.needs, *stage.wants):
                if name in done:
                    inputs[name] = _within(name, done[name], *seen)
                elif name in signals.roles:
                    inputs[name] = signals.read(name, *seen)
            given = stage.function(**inputs, **settings)
            return *block, given if isinstance(given, tuple) else (given,)

        rows = []
        with ThreadPoolExecutor(self.workers) as pool:
            for i, part in enumerate(map(one, blocks) if self.workers == 1 else pool.map(one, blocks)):
                rows.append(part)
                if progress is not None:
                    progress(stage.name, (i + 1) / len(blocks))
        return {
            name: tables.join_blocks(name, [(start, stop, given[k]) for start, stop, given in rows]) for k, name in enumerate(stage.gives)
        }


@dataclass(frozen=True)
class _Signals:
    """The record's channels by role, pressures in mmHg."""

    recording: Recording
    roles: Mapping[str, str]
    unit_of: Mapping[str, str]

    def __post_init__(self) -> None:
        for label in self.unit_of:
            self.recording.channel(label)
        for role in self.roles:
            if role in PRESSURE_ROLES:
                self._factor(role)

    def _factor(self, role: str) -> float:
        channel = self.recording.channel(self.roles[role])
        return units.mmhg_per_unit(self.unit_of.get(channel.label, channel.unit), channel=channel.label)

    def read(self, role: str, start_s: float, stop_s: float) -> Signal:
        signal = self.recording.channel(self.roles[role]).signal(max(start_s, 0.0), stop_s)
        if role not in PRESSURE_ROLES:
            return signal
        factor = self._factor(role)
        values = signal.values if factor == 1.0 else signal.values * factor
        return Signal(values, signal.sampling_rate, signal.start_s, signal.label, "mmHg")


def _blocks(start_s: float, stop_s: float, block_s: float) -> Iterator[tuple[float, float]]:
    """Cores of the grid blocks that the stretch touches; grid lines are multiples of `block_s`."""
    for k in range(int(start_s // block_s), int(np.ceil(stop_s / block_s))):
        yield k * block_s, (k + 1) * block_s


def _within(name: str, table: pd.DataFrame, start_s: float, stop_s: float) -> pd.DataFrame:
    """Rows whose time lies in ``[start_s, stop_s)``; spans that reach into it, whole."""
    time = table[tables.time_column(table)].to_numpy(float)
    if name == "spans":
        return table[(time < stop_s) & (time + table["duration_s"].to_numpy(float) > start_s)]
    return table[(time >= start_s) & (time < stop_s)]


def _detect(detector: registry.Detector, signal: Signal) -> pd.DataFrame:
    """Events of one detector over a stretch, run on the fixed grid of short stretches with margins."""
    found = []
    for start_s, stop_s in _blocks(signal.start_s, signal.stop_s, DETECTOR_GRID_S):
        first, last = np.clip(signal.position([start_s - DETECTOR_MARGIN_S, stop_s + DETECTOR_MARGIN_S]), 0, len(signal)).astype(int)
        from_s = signal.start_s + first / signal.sampling_rate
        piece = Signal(signal.values[first:last], signal.sampling_rate, from_s, signal.label, signal.unit)
        times = np.asarray(detector.function(piece), dtype=np.float64)
        found.append(times[(times >= start_s) & (times < stop_s)])
    times = np.concatenate(found) if found else np.empty(0)
    return pd.DataFrame({"time_s": times, "detector": detector.name})


