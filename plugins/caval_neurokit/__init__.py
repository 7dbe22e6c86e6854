"""NeuroKit2's grammar for the venous pressure: the `cvp_*` family, and NeuroKit2's R-peak detectors for caval.

``cvp_clean``, ``cvp_peaks`` and ``cvp_process`` take and give what NeuroKit2's own ``rsp_*`` and ``ecg_*`` functions do: arrays in,
``(signals, info)`` out, R peaks as sample indices. Waves are found by caval's pipeline; nothing is detected here.
"""

from __future__ import annotations

from caval_neurokit.cvp_clean import cvp_clean
from caval_neurokit.cvp_peaks import cvp_peaks
from caval_neurokit.cvp_plot import cvp_plot
from caval_neurokit.cvp_process import cvp_process
from caval_neurokit.cvp_simulate import cvp_simulate

__all__ = ["cvp_clean", "cvp_peaks", "cvp_plot", "cvp_process", "cvp_simulate"]
