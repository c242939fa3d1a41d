"""The command line: parses to a plan, calls the front door, prints words. `--help` imports nothing heavy."""

from withstand.cli.entry import main

__all__ = ["main"]
