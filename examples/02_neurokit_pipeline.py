"""A NeuroKit2 pipeline with the venous pressure beside the ECG. Ends in neurokit.png in the folder given (default: marked)."""

import sys
from pathlib import Path

import neurokit2 as nk

import caval
from caval_neurokit import cvp_plot, cvp_process

RATE = 250
folder = Path(sys.argv[1] if len(sys.argv) > 1 else "marked")
folder.mkdir(exist_ok=True)

# NeuroKit2 wants every signal on one clock: bring the channels of a record to one rate.
record = caval.demo_recording(minutes=1)
ecg, cvp, abp = (
    nk.signal_resample(record.read(label), sampling_rate=record.channel(label).sampling_rate, desired_sampling_rate=RATE)
    for label in ("ECG II", "CVP", "ABP")
)

# The host finds the R peaks; caval finds the waves that go with them.
_, rpeaks = nk.ecg_peaks(nk.ecg_clean(ecg, sampling_rate=RATE), sampling_rate=RATE)
signals, info = cvp_process(cvp, rpeaks=rpeaks, sampling_rate=RATE)
for wave in ("CVP_A_Peaks", "CVP_X_Troughs", "CVP_V_Peaks", "CVP_Y_Troughs"):
    level = signals.loc[signals[wave] == 1, "CVP_Clean"]
    print(f"{wave:<14} {len(level)} marks, median {level.median():.1f} mmHg")

# Left to itself, caval fuses ECG and arterial trace, which costs no beat in the diathermy of this record.
_, fused = cvp_process(cvp, ecg, sampling_rate=RATE, abp_signal=abp)
print(len(info["CVP_R_Peaks"]), "beats with NeuroKit2's R peaks,", len(fused["CVP_R_Peaks"]), "with ECG and arterial trace together")

picture = cvp_plot(signals, info)
picture.set_size_inches(12, 8)
picture.savefig(folder / "neurokit.png")
print(folder / "neurokit.png")
