"""Fixtures of the products' tests: made-up results, a surface, a CRS, a provenance."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime

import numpy as np
import pytest
from pyproj import CRS

from stillground.products.provenance import Provenance
from stillground.protocols import Result

from .made_up_results import SURFACE, make_result


@pytest.fixture(scope="session")
def make() -> Callable[..., Result]:
    return make_result


@pytest.fixture(scope="session")
def result() -> Result:
    return make_result()


@pytest.fixture(scope="session")
def surface() -> tuple[np.ndarray, np.ndarray]:
    return SURFACE


@pytest.fixture(scope="session")
def crs() -> CRS:
    return CRS("EPSG:32631")


@pytest.fixture
def provenance() -> Provenance:
    return Provenance(
        title="Osmere Weir, left abutment (invented)",
        config_text='title = "Osmere Weir"\n[survey]\nkind = "straight-ray"\n',
        command="stillground run osmere-weir.toml",
        inputs={"crosshole-ab.csv": "3f2a" * 16},
        versions={"stillground": "0.1.0", "numpy": "2.0.0"},
        created=datetime(2026, 12, 1, 5, 10, tzinfo=UTC),
        cautions="The rule l-curve is weak here.",
    )
