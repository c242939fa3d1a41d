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
from withstand.procedures.fitted_weights import FittedWeights, FittedWeightsHc3
from withstand.procedures.prais_winsten import Gls, PraisWinsten
from withstand.procedures.m_estimates import Bisquare, Huber
from withstand.procedures.lad import Lad, LadKernel
from withstand.procedures.bootstrap import WildBootstrap
from withstand.procedures.cluster_bootstrap import WildClusterBootstrap
from withstand.procedures.resampling import PairsBootstrap, ResidualBootstrap
from withstand.procedures.permutation import Permutation
from withstand.procedures.transforms import BoxCox, LogResponse, SqrtResponse
from withstand.procedures.glm import GammaLog, PoissonLog
from withstand.procedures.add_square import AddSquare
from withstand.procedures.drop_outliers import DropOutliers
from withstand.procedures.custom import Custom

# isort: on
from withstand.procedures.base import REGISTRY, Answer, LinearProcedure, Procedure, make_procedure

__all__ = [
    "REGISTRY",
    "AddSquare",
    "Answer",
    "Bisquare",
    "BoxCox",
    "Cr0",
    "Cr1",
    "Cr2",
    "Custom",
    "DropOutliers",
    "FittedWeights",
    "FittedWeightsHc3",
    "GammaLog",
    "Gls",
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
    "Huber",
    "KnownWeights",
    "Lad",
    "LadKernel",
    "LinearProcedure",
    "LogResponse",
    "Ols",
    "PairsBootstrap",
    "Permutation",
    "PoissonLog",
    "PraisWinsten",
    "Procedure",
    "ResidualBootstrap",
    "SqrtResponse",
    "WildBootstrap",
    "WildClusterBootstrap",
    "make_procedure",
]
