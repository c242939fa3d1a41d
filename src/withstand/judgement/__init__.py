"""What the measures mean: tolerances, verdicts, tipping and plausible severities, ranking. Pure functions."""
