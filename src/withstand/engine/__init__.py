"""The simulator: shared noise, the kernel that runs a block, additive tallies, the ledger, and workers.

It knows nothing of verdicts. A result depends on seed and block number alone.
"""
