"""rings."""
