"""What noise in the data does to the answer, and how well they determine what stands beside it."""

from stillground.uncertainty.extra_deviations import extra_deviations
from stillground.uncertainty.noise_part import noise_part

__all__ = ["extra_deviations", "noise_part"]
