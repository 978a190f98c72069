"""One-loop scalar integrals over many kinematic points, every number with a proven error bound."""

from loopint.api import bubble, tadpole
from loopint.core.errors import (
    InputError,
    LoopintError,
    LostOrderError,
    UnregulatedError,
    UnsupportedIntegralError,
)
from loopint.core.laurent import LaurentSeries

__version__ = "0.1.0"

__all__ = [
    "InputError",
    "LaurentSeries",
    "LoopintError",
    "LostOrderError",
    "UnregulatedError",
    "UnsupportedIntegralError",
    "__version__",
    "bubble",
    "tadpole",
]
