"""One-loop scalar integrals over many kinematic points, every number with a proven error bound."""

from loopint.api import bubble, formula, propagator, tadpole
from loopint.core.errors import (
    InputError,
    LoopintError,
    LostOrderError,
    UnregulatedError,
    UnsupportedIntegralError,
)
from loopint.core.laurent import LaurentSeries
from loopint.integrals.reduction import Reduction, reduce_bubble

__version__ = "0.1.0"

__all__ = [
    "InputError",
    "LaurentSeries",
    "LoopintError",
    "LostOrderError",
    "Reduction",
    "UnregulatedError",
    "UnsupportedIntegralError",
    "__version__",
    "bubble",
    "formula",
    "propagator",
    "reduce_bubble",
    "tadpole",
]
