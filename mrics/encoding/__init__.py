"""The encoding room."""
