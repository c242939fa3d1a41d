"""Residual statistics of whole blocks: what a usual diagnostic would show, in every replicate at once.

One file a family; `base` holds the registry, `for_departure` chooses the statistic that answers to each departure, `critical`
turns simulated values into critical values and detection rates.
"""
