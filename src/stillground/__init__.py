"""Reconstructs ground sections from geophysical profiles, and argues for the stop and the grid.

Examples
--------
Read a survey, reconstruct it, look at the labelled result::

    import stillground

    survey = stillground.read_survey("picks.csv")
    result = stillground.reconstruct_survey(
        survey,
        errors={"floor": "0.05 ms"},
        ground={"spacing": "0.25 m", "correlation": {"horizontal": "4 m", "vertical": "2 m"}},
    )
    result.verdict, result.picture["velocity"]

A whole configuration, products on disk: ``stillground.run_config("line.toml")``.
"""

from importlib import import_module
from importlib.metadata import version
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from stillground.config import load as load_config
    from stillground.grid import Grid
    from stillground.operators.ground_conductivity import GroundConductivity
    from stillground.operators.prior_root import PriorRoot
    from stillground.operators.straight_rays import StraightRays
    from stillground.pipeline.run import reconstruct_survey, run_config
    from stillground.survey import read as read_survey

# Loaded when first asked for: the command line's help need not wait for compilers and plotting.
_PUBLIC = {
    "Grid": ("stillground.grid", "Grid"),
    "GroundConductivity": ("stillground.operators.ground_conductivity", "GroundConductivity"),
    "PriorRoot": ("stillground.operators.prior_root", "PriorRoot"),
    "StraightRays": ("stillground.operators.straight_rays", "StraightRays"),
    "load_config": ("stillground.config", "load"),
    "read_survey": ("stillground.survey", "read"),
    "reconstruct_survey": ("stillground.pipeline.run", "reconstruct_survey"),
    "run_config": ("stillground.pipeline.run", "run_config"),
}

__all__ = [
    "Grid",
    "GroundConductivity",
    "PriorRoot",
    "StraightRays",
    "load_config",
    "read_survey",
    "reconstruct_survey",
    "run_config",
]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        return version("stillground")
    if name not in _PUBLIC:
        raise AttributeError(f"module 'stillground' has no attribute '{name}'")
    module, attribute = _PUBLIC[name]
    return getattr(import_module(module), attribute)


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
