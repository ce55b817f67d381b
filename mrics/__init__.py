"""mrics."""
