"""Scaling studies: points measured under the launcher, metrics, cost model, report."""
