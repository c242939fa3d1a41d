"""Which broken regression assumption matters at your sample size, on your own design matrix."""
