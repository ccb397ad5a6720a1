"""Tests of the package, on one rank and on several."""
