"""beam room."""
