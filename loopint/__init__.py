"""One-loop scalar integrals over many kinematic points, every number with a proven error bound."""

from typing import TYPE_CHECKING, Any

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

if TYPE_CHECKING:
    from loopint.arrays.bubble import bubble_array
    from loopint.arrays.result import ArrayResult
    from loopint.arrays.tadpole import tadpole_array
    from loopint.frames import evaluate
    from loopint.interpolation.files import load_interpolant
    from loopint.interpolation.interpolant import Interpolant
    from loopint.interpolation.surface import SurfaceInterpolant

__version__ = "0.1.0"

_LATER = {
    "ArrayResult": "arrays.result",
    "Interpolant": "interpolation.interpolant",
    "SurfaceInterpolant": "interpolation.surface",
    "bubble_array": "arrays.bubble",
    "evaluate": "frames",
    "load_interpolant": "interpolation.files",
    "tadpole_array": "arrays.tadpole",
}

__all__ = [
    "ArrayResult",
    "InputError",
    "Interpolant",
    "LaurentSeries",
    "LoopintError",
    "LostOrderError",
    "Reduction",
    "SurfaceInterpolant",
    "UnregulatedError",
    "UnsupportedIntegralError",
    "__version__",
    "bubble",
    "bubble_array",
    "evaluate",
    "formula",
    "load_interpolant",
    "propagator",
    "reduce_bubble",
    "tadpole",
    "tadpole_array",
]


def __getattr__(name: str) -> Any:  # noqa: ANN401 - PEP 562
    """Import what needs NumPy, or files, when it is first used."""
    if name not in _LATER:
        raise AttributeError(f"module 'loopint' has no attribute {name!r}")
    from importlib import import_module  # noqa: PLC0415

    return getattr(import_module(f"loopint.{_LATER[name]}"), name)
