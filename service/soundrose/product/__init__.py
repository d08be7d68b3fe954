"""product room."""
