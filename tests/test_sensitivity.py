"""How far the answer moves with the lengths, the smoothness and the background."""

from __future__ import annotations

from dataclasses import replace
from importlib import import_module

import numpy as np
import pytest

from stillground.progress import finish
from stillground.protocols import Sensitivity
from stillground.sensitivity import vary
from twins import BACKGROUND, Twin, a_method, crosshole_twin, reconstructed

# Its function has the room's own name for it.
room = import_module("stillground.sensitivity.vary")


@pytest.fixture(scope="module")
def twin() -> Twin:
    return crosshole_twin(14, spacing=1.0)


@pytest.fixture(scope="module")
def found(twin: Twin) -> Sensitivity:
    return finish(vary(twin.measurement, twin.grid, a_method()))


def test_no_change_moves_nothing(twin: Twin, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(room, "_LENGTHS", {"lengths as they are": 1.0})
    monkeypatch.setattr(room, "_SMOOTHNESS", {"smoothness as it is": 0.0})
    monkeypatch.setattr(room, "_BACKGROUNDS", {"background as it is": 1.0, "and again": 1.0})
    found = finish(vary(twin.measurement, twin.grid, a_method()))
    assert [variation.distance for variation in found.variations] == pytest.approx([0.0] * 4, abs=1e-9)
    assert float(found.spread.max()) < 1e-9 * BACKGROUND
    np.testing.assert_array_equal(found.investigation, 0.0)


def test_each_variation_is_the_reconstruction_with_that_setting(twin: Twin, found: Sensitivity) -> None:
    base, halved = (
        reconstructed(twin, a_method(correlation=lengths)) for lengths in ((3.0, 2.0), (1.5, 1.0))
    )
    model = base.model(base.stop("gcv"))
    moved = twin.grid.norm(halved.model(halved.stop("gcv")) - model)
    size = twin.grid.norm(model - twin.grid.mean(model))
    told = {variation.name: variation for variation in found.variations}
    assert told["lengths halved"].distance == pytest.approx(moved / size, rel=1e-9)
    assert told["lengths halved"].iteration == halved.stop("gcv")
    assert set(told) == {
        "lengths halved", "lengths doubled", "smoothness less 0.5", "smoothness plus 0.5",
        "background less 10 %", "background plus 10 %",
    }  # fmt: skip


def test_every_variation_moves_the_picture_by_less_than_itself(found: Sensitivity) -> None:
    for variation in found.variations:
        assert variation.distance > 0.005, variation
    for variation in found.variations[:4]:
        assert variation.distance < 0.6, variation


def test_the_index_of_investigation_is_small_between_boreholes_and_large_outside(
    twin: Twin, found: Sensitivity
) -> None:
    # Oldenburg & Li (1999): near 0 where the data decide, 1 where the background does.
    x, z = np.meshgrid(*twin.grid.axes, indexing="ij")
    between = (x > 2) & (x < 7) & (z > -10) & (z < -2)
    outside = (x < -0.5) | (x > 9.5) | (z < -12) | (z > 0)
    assert found.investigation.min() >= 0
    assert found.investigation.max() < 1.2
    assert float(found.investigation[between].mean()) < 0.2
    assert float(found.investigation[outside].mean()) > 2 * float(found.investigation[between].mean())


def test_the_index_is_one_where_there_are_no_data_to_speak_of(twin: Twin) -> None:
    weak = replace(twin.measurement, errors=1e6 * twin.measurement.errors)
    found = finish(vary(weak, twin.grid, a_method("discrepancy", background=BACKGROUND)))
    np.testing.assert_allclose(found.investigation, 1.0, atol=1e-6)


def test_smoothness_does_not_go_below_white(twin: Twin) -> None:
    finish(vary(twin.measurement, twin.grid, a_method(smoothness=0.25, iterations=3)))
