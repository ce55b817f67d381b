"""The quality room."""
