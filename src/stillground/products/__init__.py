"""Results to CF NetCDF files, tables, the summary and figures; labels and units begin again here."""
