"""The command line."""

from svyrates.command.app import main

__all__ = ["main"]
