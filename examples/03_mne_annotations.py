"""Marks as MNE annotations, and the mean venous beat from epochs. Ends in mne.png in the folder given (default: marked)."""

import sys
from pathlib import Path

import matplotlib as mpl

mpl.use("Agg")  # no window

import mne

import caval
from caval_mne import RawCaval, annotate_cvp, create_cvp_epochs

folder = Path(sys.argv[1] if len(sys.argv) > 1 else "marked")
folder.mkdir(exist_ok=True)

# A WFDB record opens with caval_mne.read_raw_wfdb; any caval Recording becomes a Raw like this.
raw = RawCaval(caval.demo_recording(minutes=2), verbose="ERROR")
raw.set_annotations(raw.annotations + annotate_cvp(raw, verbose="ERROR"))
print(raw.annotations.count())

# MNE's own tools go on from here: events by annotation, epochs that leave out what is marked BAD_.
events, event_id = mne.events_from_annotations(raw, regexp="^CVP/", verbose="ERROR")
print({name: int((events[:, 2] == number).sum()) for name, number in event_id.items()})
epochs = create_cvp_epochs(raw, mark="v", tmin=-0.6, tmax=0.4, picks=["CVP"], verbose="ERROR")

trace = epochs.average(picks="all")
picture = mpl.figure.Figure(figsize=(8, 4.5))
axes = picture.add_subplot()
axes.plot(trace.times * 1000, trace.get_data()[0])
axes.axvline(0, color="0.8")
axes.set(xlabel="time from the v wave, ms", ylabel="CVP, mmHg", title=f"Mean of {len(epochs)} beats, aligned on v")
picture.savefig(folder / "mne.png")
print(folder / "mne.png")
