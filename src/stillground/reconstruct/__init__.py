"""One answer on one grid: standard form, iteration, rules. Arrays only."""

from stillground.reconstruct.reconstruction import Method, Reconstruction, reconstruct

__all__ = ["Method", "Reconstruction", "reconstruct"]
