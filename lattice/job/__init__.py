"""Job: the user's TOML job file, validated, and the plan a run follows."""
