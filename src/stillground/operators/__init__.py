"""pylops operators: shapes, dtypes and both formulas; the loops are in `stillground.kernels`."""
