"""What the numbers mean for the user: verdicts, tipping and plausible severities, limits, what to worry about first.

Pure functions of measures, tallies and 'give me this cell' callables; nothing here knows workers or files.
"""
