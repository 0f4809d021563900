"""Compiled loops: arrays in, arrays out; no labels, no units, no grids, no operators."""
