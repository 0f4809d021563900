"""Colours of a picture at places in the ground."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes


def colour_at(axes: Axes, distance: float, elevation: float) -> np.ndarray:
    """Colour of the picture's own image at a place, before anything is drawn over it."""
    image = axes.images[0]
    pixels = np.asarray(image.get_array())
    left, right, bottom, top = image.get_extent()
    row = int((elevation - bottom) / (top - bottom) * pixels.shape[0])
    column = int((distance - left) / (right - left) * pixels.shape[1])
    return pixels[row, column] / 255
