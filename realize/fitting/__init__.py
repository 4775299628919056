"""Measured responses to models: one method a file, one record for all of them."""

from realize.fitting import barycentric as _barycentric
from realize.fitting import ho_kalman as _ho_kalman
from realize.fitting import loewner as _loewner
from realize.fitting import subspace as _subspace
from realize.fitting import vector_fitting as _vector_fitting
from realize.fitting.face import fit_response
from realize.fitting.records import Candidate, Fit, Noise, PoleRow, Worst
from realize.fitting.registry import METHODS, Method, choose_method, choose_sample_method
from realize.fitting.samples import fit_samples
from realize.fitting.structure import Structure

__all__ = [
    "METHODS",
    "Candidate",
    "Fit",
    "Method",
    "Noise",
    "PoleRow",
    "Structure",
    "Worst",
    "choose_method",
    "choose_sample_method",
    "fit_response",
    "fit_samples",
]
