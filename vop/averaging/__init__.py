"""Averaging cubes: found from the tissue alone, then applied to any density."""
