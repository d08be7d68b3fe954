"""contact room."""
