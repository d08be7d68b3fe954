"""store room."""
