"""Solve: the Newton driver on PETSc SNES and its preconditioners."""
