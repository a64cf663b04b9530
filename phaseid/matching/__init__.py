"""matching."""
