"""The pictures along the iteration, packed within a budget: picks exact, the others as colours."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np

from stillground.products.report.encoding import Packed, coarser, pack
from stillground.products.report.folder import Profile
from stillground.products.report.ground import Ground
from stillground.protocols import Array

_SAME = 1e-6
# All as they are; then half the resolution between picks; then fewer of them; then picks as colours alone.
_PLANS = ((False, 1, 2), (True, 1, 2), (True, 2, 2), (True, 4, 2), (True, 8, 2), (True, 64, 2), (True, 64, 1))


@dataclass(frozen=True)
class Pictures:
    """Pictures by iteration.

    Parameters
    ----------
    iterations : array, shape (n_frames,)
        Ascending.
    frames : list of dict
        For each its ``stack`` ("picks" or "between") and ``index`` in it.
    picks : mapping of rule to frame
    between, picked : Packed
    note : str
        What the budget took away; may be empty.
    """

    iterations: Array
    frames: list[dict[str, Any]]
    picks: dict[str, int]
    between: Packed | None
    picked: Packed
    note: str

    @property
    def size(self) -> int:
        """Bytes in the page."""
        return len(self.picked.text) + (0 if self.between is None else len(self.between.text))


def pictures(profile: Profile, ground: Ground, room: int) -> Pictures:
    """Packs the kept iterations and the picks of a profile in about ``room`` bytes."""
    history = profile.history
    rules = [str(name) for name in history["rule"].values]
    at = history["shown_iteration"].values.astype(float)
    picked_at, first, which = np.unique(np.round(at / _SAME) * _SAME, return_index=True, return_inverse=True)
    models = ground.shown(history[f"{profile.seen}_at_pick"].values[first])

    kept = f"{profile.seen}_at_iteration"
    others, stored = np.empty(0), np.empty((0, *models.shape[1:]))
    if kept in history:
        others = history["kept_iteration"].values.astype(float)
        new = np.array([np.abs(picked_at - k).min() > 1e-3 for k in others], dtype=bool)
        others, stored = others[new], ground.shown(history[kept].values[new])
    exact = cache(lambda n_bytes: pack(models, n_bytes))
    between = None
    for halved, stride, n_bytes in _PLANS:
        packed, chosen = exact(n_bytes), stored[::stride]
        if others.size:
            between = pack(coarser(chosen) if halved else chosen, 1)
        if len(packed.text) + (len(between.text) if between else 0) <= room:
            break
    others = others[::stride]
    said = []
    if halved and between:
        said.append("pictures between picks are at half resolution")
        said += [f"only every {stride}th of them is here"] if stride > 1 else []
    said += ["values at picks are rounded as well"] if n_bytes == 1 else []

    iterations = np.concatenate([picked_at, others])
    order = np.argsort(iterations, kind="stable")
    stacks = [("picks", i) for i in range(picked_at.size)] + [("between", i) for i in range(others.size)]
    place = np.argsort(order, kind="stable")
    return Pictures(
        iterations=iterations[order],
        frames=[{"stack": stacks[i][0], "index": stacks[i][1]} for i in order],
        picks={rule: int(place[pick]) for rule, pick in zip(rules, which.reshape(-1), strict=True)},
        between=between,
        picked=packed,
        note=f"To keep this page small, {', and '.join(said)}." if said else "",
    )
