"""What the user could do: estimators with their intervals and tests, fitted to whole blocks of replicates.

One file a family; `base` holds the registry, `sample` what procedures share within a block, `fit` what they give back,
`forms` the variance estimates that are quadratic forms in the residuals.
"""

# The order of import is the order of the registry.
# isort: off
from withstand.procedures.classical import KnownWeights, Ols
from withstand.procedures.sandwich import Hc0, Hc1, Hc2, Hc2Bm, Hc3, Hc4, Hc4m, Hc5
from withstand.procedures.hac import Hac, HacCosine
from withstand.procedures.cluster import Cr0, Cr1, Cr2

# isort: on
from withstand.procedures.base import REGISTRY, Answer, LinearProcedure, Procedure, make_procedure

__all__ = [
    "REGISTRY",
    "Answer",
    "Cr0",
    "Cr1",
    "Cr2",
    "Hac",
    "HacCosine",
    "Hc0",
    "Hc1",
    "Hc2",
    "Hc2Bm",
    "Hc3",
    "Hc4",
    "Hc4m",
    "Hc5",
    "KnownWeights",
    "LinearProcedure",
    "Ols",
    "Procedure",
    "make_procedure",
]
