"""Fields and pictures as text that a browser unpacks by itself.

Fields are quantised, then left differences, zlib and base64. Code 0 is no data. Eight bits are enough
for colours; sixteen tell the values themselves.
"""

from __future__ import annotations

import base64
import io
import zlib
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from PIL import Image

from stillground.protocols import Array


@dataclass(frozen=True)
class Packed:
    """A stack of fields: the text, and what the page must know to unpack it.

    Parameters
    ----------
    text : str
        Base64 of the deflated bytes.
    about : dict
        ``count``, ``bytes`` a value, shape ``nz`` and ``nx``, and by field ``low`` and ``high``, the values
        of the first and the last code.
    """

    text: str
    about: dict[str, Any]


def pack(stack: Array, n_bytes: int) -> Packed:
    """Packs fields of shape (count, nz, nx) in codes of one or two bytes; what is not finite is no data.

    Notes
    -----
    Field i has ``value = low_i + (code - 1) (high_i - low_i) / (2^(8 bytes) - 2)``.
    """
    last = 2 ** (8 * n_bytes) - 1
    kind = np.dtype(np.uint8 if n_bytes == 1 else np.uint16)
    codes = np.zeros(stack.shape, dtype=kind)
    ends = []
    for field, code in zip(stack, codes, strict=True):
        known = np.isfinite(field)
        low, high = (float(field[known].min()), float(field[known].max())) if known.any() else (0.0, 0.0)
        # Ends go into the page as text: what is quantised by is what is read there.
        low, high = float(f"{low:.9g}"), float(f"{high:.9g}")
        step = (high - low) / (last - 1) or 1.0
        code[...] = np.where(known, np.clip(np.rint((field - low) / step), 0, last - 1) + 1, 0)
        ends.append((low, high))
    codes[..., 1:] -= codes[..., :-1]
    return Packed(
        base64.b64encode(zlib.compress(_planes(codes), 6)).decode("ascii"),
        {
            "count": stack.shape[0],
            "bytes": n_bytes,
            "nz": stack.shape[1],
            "nx": stack.shape[2],
            "low": [low for low, _ in ends],
            "high": [high for _, high in ends],
        },
    )


def _planes(codes: NDArray[np.unsignedinteger[Any]]) -> bytes:
    if codes.dtype == np.uint8:
        return codes.tobytes()
    return (codes >> 8).astype(np.uint8).tobytes() + (codes & 255).astype(np.uint8).tobytes()


def png(codes: NDArray[np.uint8], palette: ArrayLike) -> str:
    """A picture as data: URI: pixels of shape (height, width) that index rows of red, green, blue to 255."""
    image = Image.frombytes("P", codes.shape[::-1], np.ascontiguousarray(codes).tobytes())
    image.putpalette(np.asarray(palette).astype(np.uint8).tobytes())
    held = io.BytesIO()
    image.save(held, "PNG", compress_level=6)
    return "data:image/png;base64," + base64.b64encode(held.getvalue()).decode("ascii")


def coarser(stack: Array) -> Array:
    """Fields of shape (..., nz, nx), or of shape (n,), on half as many nodes each way over the same extent.

    Examples
    --------
    >>> coarser(np.array([0.0, 1.0, 2.0, 3.0, 4.0]))
    array([0., 2., 4.])
    """
    for axis in range(max(stack.ndim - 2, 0), stack.ndim):
        n = stack.shape[axis]
        if n < 3:
            continue
        at = np.linspace(0, n - 1, -(-n // 2))
        before = np.minimum(at.astype(int), n - 2)
        weight = np.expand_dims(at - before, tuple(i for i in range(stack.ndim) if i != axis)).astype(
            stack.dtype
        )
        low, high = stack.take(before, axis), stack.take(before + 1, axis)
        stack = low + weight * (high - low)
    return stack
