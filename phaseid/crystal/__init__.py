"""crystal."""
