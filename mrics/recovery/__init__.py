"""The recovery room."""
