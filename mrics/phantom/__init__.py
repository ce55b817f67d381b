"""The phantom room."""
