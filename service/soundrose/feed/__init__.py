"""feed room."""
