"""Residual statistics, batched over replicates: what a careful analyst would look at to see a departure."""
