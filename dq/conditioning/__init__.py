"""Conditioning: data faults, noise spectra and whitening; arrays in, arrays out."""

from dq.conditioning.faults import EqualRuns, classify, equal_runs
from dq.conditioning.spectrum import combine_frames, median_mean, periodograms
from dq.conditioning.whiten import (
    Whitening,
    design_whitening,
    whitened_spectra,
    whitened_spectrum,
)

__all__ = [
    "EqualRuns",
    "Whitening",
    "classify",
    "combine_frames",
    "design_whitening",
    "equal_runs",
    "median_mean",
    "periodograms",
    "whitened_spectra",
    "whitened_spectrum",
]
