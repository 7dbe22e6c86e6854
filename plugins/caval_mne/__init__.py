"""MNE's grammar for the venous pressure: a reader, annotations, events and epochs.

Nothing here changes a ``Raw``: annotations are returned, and the caller sets them.
"""

from __future__ import annotations

from caval_mne.annotate_cvp import annotate_cvp
from caval_mne.create_cvp_epochs import create_cvp_epochs
from caval_mne.find_cvp_events import find_cvp_events
from caval_mne.read_raw_wfdb import RawCaval, read_raw_wfdb

__all__ = ["RawCaval", "annotate_cvp", "create_cvp_epochs", "find_cvp_events", "read_raw_wfdb"]
