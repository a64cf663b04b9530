"""A finished identification as text and as JSON."""
