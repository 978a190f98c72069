"""Sampling rows for the cross-check and comparing table and quadrature."""

from __future__ import annotations

import hashlib
import math
from dataclasses import dataclass, replace
from decimal import Decimal
from typing import TYPE_CHECKING, Any, Literal

import mpmath
import numpy as np
from flint import acb, arb
from mpmath.libmp import NoConvergence

from loopint.core.errors import LoopintError
from loopint.core.laurent import complex_ball
from loopint.core.numbers import exact_complex, exact_real, float_with_bound, mpf_with_bound
from loopint.core.precision import BITS_PER_DIGIT, working_precision
from loopint.core.time_limit import TimeLimitError, time_limit
from loopint.quadrature import integrate_feynman

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    from flint import fmpq
    from numpy.typing import NDArray

    from loopint.core.epsilon_linear import EpsilonLinear
    from loopint.core.numbers import Ball
    from loopint.pipeline.evaluate import Computed
    from loopint.pipeline.plan import RowRequest
    from loopint.pipeline.tables import WrittenIntegral
    from loopint.quadrature import QuadratureResult

OK = "ok"
DISAGREES = "disagrees"
INCONCLUSIVE = "inconclusive"


@dataclass(frozen=True, slots=True)
class Check:
    """The comparison of one Laurent coefficient.

    Attributes
    ----------
    re, im
        The coefficient in the table.
    quadrature_re, quadrature_im
        The coefficient by quadrature; None if the quadrature failed.
    difference
        |table - quadrature|, rounded up.
    quadrature_bound
        Bound (arithmetic "balls") or estimate ("mpmath") of the error of the quadrature.
    agreed_digits
        floor(-log10((difference + both bounds) / |value|)), at least 0; None for an exact zero.
    agrees
        Whether the two are compatible within their bounds; None if the quadrature failed.
    status
        "ok"; "disagrees"; "inconclusive" if the quadrature failed, or agrees but did not reach
        its digits.
    note
        Why the quadrature failed.
    """

    order: int
    re: float
    im: float
    quadrature_re: float | None
    quadrature_im: float | None
    difference: float | None
    quadrature_bound: float | None
    agreed_digits: int | None
    agrees: bool | None
    arithmetic: str
    status: str
    note: str | None = None


def sample(
    seed: int, name: str, start: int, count: int, fraction: Decimal | str
) -> NDArray[np.bool_]:
    """Tell for `count` rows from `start` on whether an integral is cross-checked.

    The choice depends on seed, name, row and fraction alone, not on chunks or workers.  Row r gets
    output r of the generator SplitMix64 (Steele, Lea and Flood, OOPSLA 2014), started from a hash
    of seed and name.

    Examples
    --------
    >>> chosen = sample(1, "loop", 0, 10_000, Decimal("0.1"))
    >>> int(chosen.sum())
    957
    >>> again = sample(1, "loop", 500, 9, Decimal("0.1"))
    >>> (again == chosen[500:509]).tolist() == [True] * 9
    True
    """
    if fraction in ("all", 1):
        return np.ones(count, dtype=bool)
    if fraction == "none":
        return np.zeros(count, dtype=bool)
    digest = hashlib.blake2b(f"{seed}:{name}".encode(), digest_size=8).digest()
    state = np.arange(start + 1, start + count + 1, dtype=np.uint64)
    state = state * np.uint64(0x9E3779B97F4A7C15) + np.frombuffer(digest, dtype="<u8")
    state = (state ^ (state >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    state = (state ^ (state >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    state ^= state >> np.uint64(31)
    chosen: NDArray[np.bool_] = state < np.uint64(int(Decimal(fraction) * 2**64))
    return chosen


def cross_check(
    computed: Computed,
    table: WrittenIntegral,
    *,
    digits: int,
    arithmetic: Literal["balls", "mpmath"],
    seconds: float | None = None,
) -> list[Check]:
    """Integrate the Feynman representation and compare every order.

    Parameters
    ----------
    computed
        The proven balls.
    table
        The same integral as it stands in the table.
    digits
        Relative digits of each coefficient asked of the quadrature.
    arithmetic
        "balls": both sides are enclosures and must overlap.  "mpmath": the difference must not
        exceed 10^-digits |value| plus the bound of the table and the error estimate.
    seconds
        The time limit of the quadrature.
    """
    try:
        if computed.evaluation.timed_out:
            raise TimeLimitError("nothing to compare: the evaluation reached its time limit")
        with time_limit(seconds):
            result = _integrated(computed.request, digits, arithmetic)
        with working_precision(128 + 2 * math.ceil(digits * BITS_PER_DIGIT)):
            return list(_compare(computed, table, result, digits))
    except LoopintError as error:
        note = str(error)
    except (
        ArithmeticError, AssertionError, LookupError, NoConvergence, RuntimeError, TypeError,
        ValueError,
    ) as error:  # fmt: skip
        note = f"unexpected {type(error).__name__}: {error}"  # the row itself is not affected
    return [
        Check(
            order, number.re, number.im, None, None, None, None, None, None, arithmetic,
            INCONCLUSIVE, note,
        )
        for order, number in enumerate(table.numbers, start=table.lowest_order)
    ]  # fmt: skip


def _integrated(
    request: RowRequest, digits: int, arithmetic: Literal["balls", "mpmath"]
) -> QuadratureResult:
    """Integrate an integral, or the one its derivative is a multiple of."""
    integral, term = request.integral, request.integral.term
    lowest, highest = integral.orders
    result = integrate_feynman(
        request.point,
        tuple(_quadrature_power(n) for n in term.powers),
        term.dimension,
        (lowest - len(term.linear_factors), highest),  # a factor eps raises the orders
        request.conventions,
        digits=digits,
        arithmetic=arithmetic,
    )
    if not integral.derivatives:
        return result
    bits = 128 + 2 * math.ceil(digits * BITS_PER_DIGIT)
    with working_precision(bits), mpmath.workprec(bits):
        weights = [arb(term.factor(request.conventions))]
        for linear in term.linear_factors:
            pairs = zip([*weights, arb(0)], [arb(0), *weights], strict=True)
            weights = [same * linear.constant + below * linear.rate for same, below in pairs]
        rounded = [mpf_with_bound(weight, digits + 20)[0] for weight in weights]
        sizes = [abs(weight) for weight in rounded]
        return replace(
            result,
            orders=integral.orders,
            values=_weighted(result.values, rounded, integral.orders),
            errors=_weighted(result.errors, sizes, integral.orders),
            balls=_weighted(result.balls, weights, integral.orders),
        )


def _quadrature_power(power: int | EpsilonLinear) -> int | tuple[int, fmpq]:
    """Return n, or (n, a) for n + a eps."""
    return power if isinstance(power, int) else (int(power.constant.p), power.rate)


def _weighted(
    series: Mapping[int, Any], weights: Sequence[Any], orders: tuple[int, int]
) -> dict[int, Any]:
    """Multiply a series in eps, empty or known below the orders, by a polynomial."""
    if not series:
        return {}
    return {
        k: sum((weight * series[k - j] for j, weight in enumerate(weights)), start=0)
        for k in range(orders[0], orders[1] + 1)
    }


def _compare(
    computed: Computed, table: WrittenIntegral, result: QuadratureResult, digits: int
) -> Iterator[Check]:
    lowest, highest = computed.request.integral.orders
    balls = {k: computed.evaluation.series[k] for k in range(lowest, highest + 1)}
    largest = max((arb(ball.abs_upper()) for ball in balls.values()), key=float)
    tolerance = 1 / arb(10) ** digits
    for (order, ball), number in zip(balls.items(), table.numbers, strict=True):
        middle, bound = _quadrature_value(result, order)
        difference = arb((complex_ball(ball).mid() - middle).abs_upper())
        size = arb(ball.abs_upper())
        if result.arithmetic == "balls":
            agrees = _overlap(ball, result.balls[order]) and _overlap(
                acb(arb(number.re, number.re_bound), arb(number.im, number.im_bound)),
                result.balls[order],
            )
        else:
            agrees = bool(not difference > tolerance * size + ball.rad() + bound)
        # A coefficient that may be zero has no relative accuracy: its scale is the largest one.
        scale = size if arb(ball.abs_lower()) > 0 else largest
        if scale > 0:
            reached = bool(bound <= tolerance * scale)
        else:
            reached = bool(bound == 0) or result.reached_digits >= digits
        yield Check(
            order,
            number.re,
            number.im,
            float_with_bound(middle.real)[0],
            float_with_bound(middle.imag)[0],
            _float_up(difference),
            _float_up(bound),
            _agreed_digits(difference + bound + ball.rad(), size),
            agrees,
            result.arithmetic,
            DISAGREES if not agrees else OK if reached else INCONCLUSIVE,
        )


def _quadrature_value(result: QuadratureResult, order: int) -> tuple[acb, arb]:
    """Return the value of the quadrature and its error bound or estimate."""
    if result.arithmetic == "balls":
        ball = complex_ball(result.balls[order])
        return ball.mid(), ball.rad()
    value = complex_ball(exact_complex(result.values[order]).ball())
    return value, arb(exact_real(result.errors[order]))


def _overlap(a: Ball, b: Ball) -> bool:
    return bool(complex_ball(a).overlaps(complex_ball(b)))


def _float_up(value: arb) -> float:
    middle, bound = float_with_bound(value)
    return math.nextafter(middle + bound, math.inf) if bound else middle


def _agreed_digits(total: arb, size: arb) -> int | None:
    if total == 0 or size == 0:
        return None
    decades = -(total / size).log() / arb(10).log()
    return max(0, min(math.floor(float(decades.mid())), 2**15 - 1))
