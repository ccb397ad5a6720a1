"""Batch: sites, scripts, submission, legs of a run, and the watch over runs."""
