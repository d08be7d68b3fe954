"""serve room."""
