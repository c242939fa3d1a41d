"""Answers without simulation: moments for any law, coverage, size and power for normal errors."""
