"""Tables as annotation tracks: CSV, and BIDS physiological events."""

from __future__ import annotations

from caval.registry import Format
from caval_table.bids import read_physioevents, write_physioevents
from caval_table.csv_track import read_csv_track, write_csv_track

__all__ = ["BIDS", "CSV", "read_csv_track", "read_physioevents", "write_csv_track", "write_physioevents"]

CSV = Format(
    name="csv",
    description="annotations as a comma-separated table",
    suffixes=(".csv",),
    read_track=read_csv_track,
    write_marked=write_csv_track,
)
BIDS = Format(
    name="bids",
    description="annotations as BIDS physioevents (.tsv.gz with .json)",
    suffixes=(".gz",),
    read_track=read_physioevents,
    write_marked=write_physioevents,
)
