"""Survey tables: reading, checking and writing them, and the section plane through their positions.

The way of a table: ``read`` (the file's own faults raise), ``check`` (all other faults at once),
``profiles`` (one dataset a line), ``fit_section`` and ``out_of_plane`` for each profile.
"""

from stillground.survey.check import SurveyReport, check
from stillground.survey.columns import COLUMNS, Column, column
from stillground.survey.earlier_section import read_earlier_section
from stillground.survey.faults import row_numbers, source_of
from stillground.survey.known import read_known
from stillground.survey.numbering import numbered
from stillground.survey.plane import (
    Section,
    fit_section,
    out_of_plane,
    plan_positions,
    require_plausible,
)
from stillground.survey.polyline import Polyline, through_stations
from stillground.survey.read import profiles, read
from stillground.survey.surface import read_surface
from stillground.survey.table import require_file
from stillground.survey.units import quantity, to_si
from stillground.survey.velocities import read_velocities
from stillground.survey.write import write_table

__all__ = [
    "COLUMNS",
    "Column",
    "Polyline",
    "Section",
    "SurveyReport",
    "check",
    "column",
    "fit_section",
    "numbered",
    "out_of_plane",
    "plan_positions",
    "profiles",
    "quantity",
    "read",
    "read_earlier_section",
    "read_known",
    "read_surface",
    "read_velocities",
    "require_file",
    "require_plausible",
    "row_numbers",
    "source_of",
    "through_stations",
    "to_si",
    "write_table",
]
