"""The command line: thin commands that import what they need only when they run."""

from fathomline.cli.main import main

__all__ = ["main"]
