"""Check: how far a state can be trusted, with numbers, and what may be said of it."""
