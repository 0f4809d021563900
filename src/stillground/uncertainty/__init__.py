"""What noise in the data does to the answer."""

from stillground.uncertainty.noise_part import noise_part

__all__ = ["noise_part"]
