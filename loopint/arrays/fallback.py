"""Single points in ball arithmetic, rounded to doubles."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from loopint.core.errors import MorePrecisionNeeded
from loopint.core.numbers import float_with_bound, imaginary_part, real_part
from loopint.integrals.registry import Evaluator, Integral, Point

if TYPE_CHECKING:
    from collections.abc import Callable

    from loopint.arrays.rounding import Complex, Real
    from loopint.core.conventions import Conventions

BALL_DIGITS = 18  # the bound is then the rounding to float64


def evaluate_points(
    integral: Integral,
    conventions: Conventions,
    point: Callable[[int], Point],
    index: NDArray[np.intp],
    values: dict[int, Complex],
    bounds: dict[int, Real],
) -> None:
    """Fill in the flat arrays at the given places."""
    evaluator = Evaluator(integral, conventions, digits=BALL_DIGITS)
    for i in index:
        try:
            series = evaluator(point(int(i))).series
        except MorePrecisionNeeded:
            series = None
        for order, value in values.items():
            if series is None:
                value[i], bounds[order][i] = complex(math.nan, math.nan), math.inf
                continue
            ball = series[order]
            re, re_bound = float_with_bound(real_part(ball))
            im, im_bound = float_with_bound(imaginary_part(ball))
            value[i] = complex(re, im)
            bounds[order][i] = hypotenuse_up(re_bound, im_bound)


def hypotenuse_up(a: float, b: float) -> float:
    """Return an upper bound on sqrt(a^2 + b^2)."""
    if a == 0 or b == 0:
        return max(a, b)
    return math.nextafter(math.hypot(a, b) * (1 + 2.0**-50), math.inf)
