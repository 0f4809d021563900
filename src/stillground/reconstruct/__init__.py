"""One answer on one grid: standard form, iteration, rules, and the loops around them. Arrays only."""

from stillground.reconstruct.extras import beside, with_delay, with_statics
from stillground.reconstruct.linearising import Linearised, Outliers, linearise, linearised_at
from stillground.reconstruct.outliers import biweight, find_outliers, reweighted, weighted_errors
from stillground.reconstruct.reconstruction import (
    Method,
    Problem,
    Reconstruction,
    judge,
    prepare,
    reconstruct,
    takes_data_space,
)
from stillground.reconstruct.suspicion import noise_size, shared_constants

__all__ = [
    "Linearised",
    "Method",
    "Outliers",
    "Problem",
    "Reconstruction",
    "beside",
    "biweight",
    "find_outliers",
    "judge",
    "linearise",
    "linearised_at",
    "noise_size",
    "prepare",
    "reconstruct",
    "reweighted",
    "shared_constants",
    "takes_data_space",
    "weighted_errors",
    "with_delay",
    "with_statics",
]
