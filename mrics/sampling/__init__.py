"""The sampling room."""
