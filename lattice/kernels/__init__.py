"""Kernels: generated loops over one padded block, free of MPI."""
