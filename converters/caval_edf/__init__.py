"""EDF, EDF+, BDF and BDF+ for caval."""

from __future__ import annotations

from caval.registry import Format
from caval_edf.read import read_annotations, read_edf
from caval_edf.write import write_edf, write_marked

__all__ = ["FORMAT", "read_annotations", "read_edf", "write_edf", "write_marked"]

FORMAT = Format(
    name="edf",
    description="European Data Format and its 24-bit kin: EDF, EDF+, BDF, BDF+",
    suffixes=(".edf", ".bdf"),
    read=read_edf,
    write=write_edf,
    read_track=read_annotations,
    write_marked=write_marked,
)
