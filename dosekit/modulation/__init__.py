"""Choosing the beam: range steps, spot grids, weights, comparison of particles."""
