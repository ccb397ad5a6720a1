"""Store: state files and run folders on disk."""
