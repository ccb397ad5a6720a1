"""Spectral: distributed Fourier transforms of lattice fields, transfer between lattices, symbols."""
