"""The command line: read arguments, call one function, print."""

from mrics.cli.main import main

__all__ = ["main"]
