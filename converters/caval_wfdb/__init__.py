"""WFDB records and annotation files for caval."""

from __future__ import annotations

from pathlib import Path

from caval.registry import Format
from caval_wfdb.annotation import read_annotations
from caval_wfdb.header import is_annotation_ending
from caval_wfdb.read import header_path, read_wfdb
from caval_wfdb.write import write_marked, write_wfdb

__all__ = ["FORMAT", "read_annotations", "read_wfdb", "write_marked", "write_wfdb"]


def _owns(path: Path) -> bool:
    """A record name without ending, a signal or annotation file beside its header, or a file that ends as annotation files do."""
    if path.suffix == ".dat" or is_annotation_ending(path.suffix[1:]) or not path.is_file():
        return header_path(path).is_file() or _ends_like_annotations(path)
    return False


def _ends_like_annotations(path: Path) -> bool:
    if not path.is_file() or path.stat().st_size < 2:
        return False
    with open(path, "rb") as stream:
        stream.seek(-2, 2)
        return stream.read() == b"\0\0"


FORMAT = Format(
    name="wfdb",
    description="WaveForm DataBase records (.hea with .dat) and annotation files",
    suffixes=(".hea",),
    read=read_wfdb,
    write=write_wfdb,
    read_track=read_annotations,
    write_marked=write_marked,
    owns=_owns,
)
