"""Command line: the only place that names MPI.COMM_WORLD."""
