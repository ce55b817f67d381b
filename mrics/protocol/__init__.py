"""The protocol room."""
