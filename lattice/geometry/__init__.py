"""Geometry: the lattice, its difference stencils, its blocks on the ranks and their halo."""
