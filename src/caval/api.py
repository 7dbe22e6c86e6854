"""The verbs of the public face: read, write, convert, mark."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from caval import registry, tables
from caval._files import write_all
from caval.errors import FileError, InputError
from caval.pipeline import BLOCK_S, DETECTORS, STAGES, Pipeline, Progress
from caval.recording import Recording
from caval.result import Result
from caval.roles import assign_roles
from caval.track import Track

__all__ = ["convert", "demo_recording", "given_beats", "mark", "read", "read_track", "write"]


def read(path: str | Path) -> Recording:
    """Open a record by an installed format: ``.edf``, ``.bdf``, ``.hea`` or a WFDB record name. Signals stay on disk until asked for.

    Raises
    ------
    FileError
        No such file, no format for it, or a broken file.
    """
    path = Path(path)
    if path.is_dir() and not any(i.value.owns and i.value.owns(path.resolve()) for i in registry.formats().values()):
        raise FileError(f"{path} is a folder; name a record in it")  # a folder may share its name with a record that has no ending
    reader = registry.format_for(path).read
    assert reader is not None  # format_for gives only formats that can
    return reader(path)


def read_track(path: str | Path) -> Track:
    """The annotations of a file: a WFDB annotation file, an EDF+ file, or a CSV table with a time column.

    Raises
    ------
    FileError
        No such file, or no format reads annotations from it.
    """
    path = Path(path)
    if not path.exists():
        raise FileError(f"no such file: {path}")
    reader = registry.format_for(path, "read_track").read_track
    assert reader is not None
    return reader(path)


def write(recording: Recording, path: str | Path, *, force: bool = False) -> tuple[Path, ...]:
    """Write signals and annotation tracks in the format of the file's ending, all files or none; returns the paths written.

    Raises
    ------
    FileError
        A file exists and `force` is not set, it is the recording's own file, or no format writes that ending.
    InputError
        Something that the format cannot hold.
    """
    path = Path(path)
    writer = registry.format_for(path, "write").write
    assert writer is not None
    made = write_all(path.parent, lambda folder: writer(recording, folder / path.name), force=force, never=recording.files)
    return tuple(made)


def convert(source: str | Path, target: str | Path, *, force: bool = False) -> tuple[Path, ...]:
    """Read `source`, write `target`, formats by file ending: signals bit for bit, annotations included. As `write`."""
    return write(read(source), target, force=force)


def demo_recording(*, minutes: float = 2.0, seed: int = 1) -> Recording:
    """A drawn record with ECG, CVP and ABP; invented, no patient."""
    from caval.model.sketch import sketch

    return sketch(minutes=minutes, seed=seed).recording


def given_beats(times_s: Sequence[float] | np.ndarray) -> pd.DataFrame:
    """A ``beats`` table from R times in seconds that someone else found; `source` is ``given``."""
    times = np.asarray(times_s, dtype=np.float64)
    if times.ndim != 1 or not np.isfinite(times).all():
        raise InputError("beat times must be one list of finite seconds")
    blank = {"r_sd_s": np.nan, "rr_s": np.nan, "source": "given", "confidence": 1.0, "kind": "normal"}
    return tables.number_beats(pd.DataFrame({"beat": 0, "r_time_s": np.sort(times), **blank}))


def mark(
    record: Recording | str | Path,
    *,
    roles: Mapping[str, str] | None = None,
    units: Mapping[str, str] | None = None,
    beats: Track | Sequence[float] | np.ndarray | None = None,
    start_s: float = 0.0,
    stop_s: float | None = None,
    stages: Sequence[str] = STAGES,
    choose: Mapping[str, str] | None = None,
    detectors: Sequence[str] = DETECTORS,
    settings: Mapping[str, Mapping[str, Any]] | None = None,
    block_s: float = BLOCK_S,
    workers: int = 1,
    progress: Progress | None = None,
) -> Result:
    """Find the beats and the a, c, x, v and y of every beat.

    Parameters
    ----------
    record : Recording, str or Path
    roles : mapping, optional
        The user's word for who is who: ``{"cvp": "P2"}``.
    units : mapping, optional
        The user's word for a pressure channel's unit: ``{"P2": "cmH2O"}``.
    beats : Track or array of float, optional
        R times in seconds found by someone else; the anchors stage then does not run.
    start_s, stop_s : float
        Stretch to analyse, seconds of the record.
    stages, choose, detectors, settings, block_s, workers, progress
        See `caval.Pipeline`.

    Returns
    -------
    Result
        Tables, track and figure. A record without a usable trace or beats gives a result without marks, and `warnings` that say why.

    Raises
    ------
    FileError, InputError
        A record that cannot be read or has no venous-pressure channel.
    """
    recording = record if isinstance(record, Recording) else read(record)
    assigned = assign_roles(recording, roles)
    given: dict[str, pd.DataFrame] = {}
    if beats is not None:
        given["beats"] = given_beats(beats.beat_times_s() if isinstance(beats, Track) else beats)
    pipeline = Pipeline(stages, choose or {}, detectors, settings or {}, block_s, workers)
    done = pipeline.run(
        recording, roles=assigned, unit_of=units, given=given, start_s=start_s, stop_s=stop_s, progress=progress
    )
    return Result.build(recording, assigned, done, pipeline=pipeline, stretch=(start_s, stop_s), units=units or {})
