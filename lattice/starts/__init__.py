"""Starts: the fields a solve may begin from."""
