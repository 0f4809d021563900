"""Survey tables for ``xarray.open_dataset(..., engine="stillground")``."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping
from typing import Any, ClassVar

import xarray as xr
from xarray.backends import BackendEntrypoint

from stillground.survey.read import read


class SurveyBackend(BackendEntrypoint):
    """Opens a survey table as a dataset on the dimension ``datum``, SI inside."""

    description: ClassVar[str] = "Open geophysical survey tables (.csv) with units, using stillground"

    def open_dataset(  # type: ignore[override]  # xarray passes on the keywords that are named here
        self,
        filename_or_obj: str | os.PathLike[Any],
        *,
        drop_variables: str | Iterable[str] | None = None,
        columns: Mapping[str, str] | None = None,
        units: Mapping[str, str] | None = None,
    ) -> xr.Dataset:
        """Open a survey table.

        Parameters
        ----------
        filename_or_obj : path of the table
        drop_variables : str or iterable of str, optional
            Columns to leave out, faulty or not.
        columns : mapping, our name to the table's, optional
        units : mapping, our name to its unit, for columns whose heading has none, optional

        Raises
        ------
        SurveyError
            With all faults of the table's columns and cells.
        """
        dropped = (drop_variables,) if isinstance(drop_variables, str) else tuple(drop_variables or ())
        return read(os.fspath(filename_or_obj), columns=columns or {}, units=units or {}, leave_out=dropped)

    def guess_can_open(self, filename_or_obj: Any) -> bool:
        """Whether it is the path of a CSV file."""
        if not isinstance(filename_or_obj, (str, os.PathLike)):
            return False
        return os.fspath(filename_or_obj).lower().endswith(".csv")
