"""The command line: the only place that prints."""

from stillground.cli.app import main

__all__ = ["main"]
