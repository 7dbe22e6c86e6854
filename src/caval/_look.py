"""What the command line shows on a terminal: a record at a glance, what is installed, the summary of a run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from caval import registry, tables
from caval.errors import CavalError, InputError
from caval.pipeline import DETECTORS, STAGES, Pipeline
from caval.recording import Channel, Recording
from caval.report._ink import length_text
from caval.roles import assign_roles
from caval.vocabulary import WAVES

if TYPE_CHECKING:
    from rich.table import Table

    from caval.result import Result

__all__ = ["print_installed", "print_record", "summary"]

_PIECE_S = 5.0
_PIECES = 120
"""Pieces of a channel that are read for its range: enough to see it, quick on any length."""


def print_record(recording: Recording, *, roles: Mapping[str, str], unit_of: Mapping[str, str]) -> None:
    """Print channels, roles, ranges, usable share, notes and annotation tracks; needs no venous pressure."""
    found, why = _roles_found(recording, roles)
    role_of = {label: role for role, label in found.items()}
    unusable, unsaid = _unusable_share(recording, found, unit_of)
    start = f", starts {recording.start_time:%Y-%m-%d %H:%M:%S}" if recording.start_time else ""
    origin = recording.format or "in memory"
    head = f"{recording.name}: {len(recording.channels)} channels, {length_text(recording.duration_s)}{start}, {origin}"
    table = _table("channel", "role", "unit", "Hz", "length", "missing", "range (1–99 %)", "unusable")
    for channel in recording.channels:
        low, high, missing = _range(channel)
        spoilt = unusable.get(channel.label)
        table.add_row(
            channel.label, role_of.get(channel.label, ""), channel.unit, f"{channel.sampling_rate:g}", length_text(channel.duration_s),
            _percent(missing), "nothing recorded" if np.isnan(low) else f"{low:.3g} to {high:.3g}",
            "" if spoilt is None else _percent(spoilt[0]) + (f" ({spoilt[1]})" if spoilt[1] else ""),
        )
    _print(head, "", table)
    said = [*recording.notes, *([why] if why else []), *([unsaid] if unsaid else [])]
    noted = {name: track for name, track in recording.tracks.items() if len(track)}
    if noted:
        tracks = _table("annotations", "number", "texts")
        for name, track in noted.items():
            tracks.add_row(name, str(len(track)), _some(track.texts))
        _print("", tracks)
    if said:
        _print("", *(f"note: {text}" for text in said))


def print_installed() -> None:
    """Print stages, detectors and formats with what they need, give and where they come from."""
    stages = _table("stage", "needs", "gives", "by default", "from")
    for name, item in registry.stages().items():
        stage = item.value
        wants = ", ".join([*stage.needs, *(f"({w})" for w in stage.wants)])
        stages.add_row(name, wants, ", ".join(stage.gives), "yes" if name in STAGES else "", _origin(item))
    detectors = _table("detector", "channel", "by default", "from")
    for name, item in registry.detectors().items():
        detectors.add_row(name, item.value.role, "yes" if name in DETECTORS else "", _origin(item))
    formats = _table("format", "endings", "reads", "writes", "track", "what it is", "from")
    for name, item in registry.formats().items():
        value = item.value
        able = ["yes" if can else "" for can in (value.read or value.read_track, value.write, value.write_marked)]
        formats.add_row(name, " ".join(value.suffixes), *able, value.description, _origin(item))
    note = "In brackets: used when there. Another package adds to these by entry point; see DEVELOPERS.md."
    _print(stages, "", detectors, "", formats, "", note)


def summary(result: Result, written: Sequence[Path]) -> str:
    """Beats, marks and files of a run, for stdout."""
    beats, marks = result.beats, result.marks
    counts = marks["mark"].value_counts()
    waves = "  ".join(f"{wave} {counts[wave]}" for wave in WAVES if wave in counts)
    reasons = beats.loc[~beats["usable"].to_numpy(bool), "reason"].value_counts()
    left_out = ", ".join(f"{reason or 'no reason given'} {n}" for reason, n in reasons.items())
    lines = [
        f"{result.recording.name}  {length_text(result.recording.duration_s)}",
        "channels  " + "  ".join(f"{role} {label!r}" for role, label in result.roles.items()),
        f"beats     {len(beats)}, usable {int(beats['usable'].sum())}" + (f"  (not: {left_out})" if left_out else ""),
        f"marks     {len(marks)}" + (f"  {waves}" if waves else ""),
    ]
    lines += [f"rhythm    {result.rhythm_text}"] if result.rhythm_text else []
    lines += [f"delay     {result.delay_text}"] if result.delay_text else []
    if written:
        lines.append(f"files     {written[0].parent}/  " + "  ".join(path.name for path in written))
    return "\n".join(lines)


def _roles_found(recording: Recording, chosen: Mapping[str, str]) -> tuple[dict[str, str], str]:
    """The roles that can be filled, and why the venous pressure could not be."""
    try:
        return assign_roles(recording, chosen), ""
    except InputError as error:
        if "cvp" in chosen:
            raise
        return assign_roles(recording, chosen, required=False), str(error)


def _unusable_share(
    recording: Recording, roles: Mapping[str, str], unit_of: Mapping[str, str]
) -> tuple[dict[str, tuple[float, str]], str]:
    """Share of each channel that the quality stage calls unusable, with the most frequent kind; and why, where it cannot say."""
    if not roles or not recording.duration_s:
        return {}, ""
    try:
        done = Pipeline(stages=("quality",)).run(recording, roles=roles, unit_of=unit_of, given={"candidates": tables.empty("candidates")})
    except CavalError as error:
        return {}, f"quality not judged: {error}" if "cvp" in roles else ""
    spans = done.get("spans", tables.empty("spans"))
    return {label: _covered(spans[spans["channel"] == label], recording.duration_s) for label in roles.values()}, ""


def _covered(spans: pd.DataFrame, duration_s: float) -> tuple[float, str]:
    """Share of the record under at least one span, and the kind that covers most."""
    if not len(spans):
        return 0.0, ""
    order = np.argsort(spans["onset_s"].to_numpy(float), kind="stable")
    onset = spans["onset_s"].to_numpy(float)[order]
    reach = np.maximum.accumulate(onset + spans["duration_s"].to_numpy(float)[order])
    before = np.r_[onset[0], reach[:-1]]
    covered = float(np.clip(reach - np.maximum(onset, before), 0, None).sum())
    return min(covered / duration_s, 1.0), str(spans.groupby("kind")["duration_s"].sum().idxmax())


def _range(channel: Channel) -> tuple[float, float, float]:
    """First and ninety-ninth percentile and the share missing, from pieces spread over the channel."""
    length = max(1, round(_PIECE_S * channel.sampling_rate))
    if channel.n_samples <= length * _PIECES:
        values = channel.physical()
    else:
        starts = np.linspace(0, channel.n_samples - length, _PIECES).astype(int)
        values = np.concatenate([channel.physical(int(s), int(s) + length) for s in starts])
    known = values[np.isfinite(values)]
    low, high = np.percentile(known, [1, 99]) if len(known) else (np.nan, np.nan)
    return float(low), float(high), 1.0 - len(known) / len(values) if len(values) else 1.0


def _table(*columns: str) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for column in columns:
        right = column in ("Hz", "length", "missing", "number")
        table.add_column(column, justify="right" if right else "left", overflow="fold")
    return table


def _print(*parts: str | Table) -> None:
    from rich.console import Console

    console = Console(highlight=False, markup=False, emoji=False)
    if not console.is_terminal:
        console.width = max(console.width, 160)  # a pipe has no edge to wrap at
    for part in parts:
        console.print(part)


def _origin(item: registry.Installed) -> str:
    return f"{item.package} {item.version}, {item.location.partition(':')[0]}"


def _some(texts: Sequence[str], most: int = 8) -> str:
    return ", ".join([*texts[:most], *(["…"] if len(texts) > most else [])])


def _percent(share: float) -> str:
    return "none" if share == 0 else "< 1 %" if share < 0.01 else f"{share * 100:.0f} %"
