"""Kinds of measurement, one file each: from a labelled survey to arrays. Labels end here."""
