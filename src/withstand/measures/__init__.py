"""From tallies to measures, each with its Monte Carlo standard error and its shift from the baseline."""
