"""Stopping rules: pure functions of the history, one file each, none knows of another."""
