"""The scan room."""
