"""The command line: parses to a plan, calls the front door, prints words. `--help` imports nothing heavy."""
