"""Sampling rows for the cross-check and comparing table and quadrature."""

from __future__ import annotations

import hashlib
import math
from dataclasses import dataclass
from decimal import Decimal
from typing import TYPE_CHECKING, Literal

from flint import acb, arb
from mpmath.libmp import NoConvergence

from loopint.core.errors import LoopintError
from loopint.core.laurent import complex_ball
from loopint.core.numbers import exact_complex, exact_real, float_with_bound
from loopint.core.precision import BITS_PER_DIGIT, working_precision
from loopint.quadrature import integrate_feynman

if TYPE_CHECKING:
    from collections.abc import Iterator

    from loopint.core.numbers import Ball
    from loopint.pipeline.evaluate import Computed
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


def is_sampled(seed: int, row: int, name: str, fraction: Decimal | str) -> bool:
    """Whether an integral of a row is cross-checked.

    The choice depends on these arguments alone, not on chunks or workers.

    Examples
    --------
    >>> sum(is_sampled(1, row, "loop", Decimal("0.1")) for row in range(10_000))
    968
    """
    if fraction == "all":
        return True
    if fraction == "none":
        return False
    digest = hashlib.blake2b(f"{seed}:{row}:{name}".encode(), digest_size=8).digest()
    return int.from_bytes(digest, "big") < int(Decimal(fraction) * 2**64)


def cross_check(
    computed: Computed,
    table: WrittenIntegral,
    *,
    digits: int,
    arithmetic: Literal["balls", "mpmath"],
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
    """
    request = computed.request
    integral = request.integral
    try:
        result = integrate_feynman(
            request.point,
            integral.powers,
            integral.dimension,
            integral.orders,
            request.conventions,
            digits=digits,
            arithmetic=arithmetic,
        )
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
