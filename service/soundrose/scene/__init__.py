"""scene room."""
