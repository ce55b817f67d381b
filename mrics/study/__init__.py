"""The study room."""
