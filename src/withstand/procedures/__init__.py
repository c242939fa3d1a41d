"""What the user could do: estimators with their intervals and tests, fitted to whole blocks of replicates.

One file a family; `base` holds the registry, `sample` what procedures share within a block, `fit` what they give back,
`forms` the variance estimates that are quadratic forms in the residuals.
"""
