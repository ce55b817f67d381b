"""Makes the helpers of this folder (``open_volumes``) importable from every test."""
