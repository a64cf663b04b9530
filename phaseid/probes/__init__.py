"""probes."""
