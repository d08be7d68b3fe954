"""array room."""
