"""Job: the user's TOML job file, validated and resolved."""
