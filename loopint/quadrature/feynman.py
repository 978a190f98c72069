"""The Feynman-parameter representation of tadpoles and bubbles, integrated to Laurent coefficients.

    B(n1,n2) = sign * N(eps) (mu^2)^eps Gamma(N-d/2) / (Gamma(n1) Gamma(n2))
               * Int_0^1 dx x^(n1-1) (1-x)^(n2-1) Q(x)^(d/2-N),      N = n1 + n2,
    Q(x)     = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0,

with Q^(-eps) = sum_k (-eps)^k log(Q)^k / k!, so that each order needs one more power of the
logarithm.  A tadpole has no integral left; its Gamma function and power are evaluated with other
code than the closed form uses.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import factorial, floor, log
from typing import TYPE_CHECKING, Literal, TypeAlias

import mpmath
from flint import arb, fmpq

from loopint.core.errors import InputError, MorePrecisionNeeded, UnsupportedIntegralError
from loopint.core.kinematics import OnePoint, Region, TwoPoint
from loopint.core.laurent import check_orders
from loopint.core.numbers import (
    Ball,
    ExactComplex,
    accuracy_bits,
    imaginary_part,
    mpf_with_bound,
    real_part,
)
from loopint.core.precision import (
    BITS_PER_DIGIT,
    bits_for_digits,
    round_up_to_word,
    working_precision,
)
from loopint.quadrature import balls, mpmath_arithmetic
from loopint.quadrature.paths import (
    build_path,
    normalisation,
    resolve_on_shell,
    zero_orders,
)
from loopint.quadrature.prefactor import pole_order, scalar_prefactor

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from loopint.core.conventions import Conventions
    from loopint.quadrature.paths import Number

ArithmeticName: TypeAlias = Literal["balls", "mpmath"]
GUARD_BITS = 20
ATTEMPTS = 5
DIMENSIONS = range(1, 13)


@dataclass(frozen=True)
class QuadratureResult:
    """Laurent coefficients from the Feynman-parameter representation.

    Attributes
    ----------
    orders
        The inclusive range (lowest, highest) that was asked for.
    arithmetic
        "balls" or "mpmath".
    proven
        True for balls: every coefficient lies in its ball.  The errors of mpmath are estimates.
    values, errors
        Order -> `mpmath.mpc` and order -> `mpmath.mpf` bound (or estimate) on |error|, in the units
        of the point.
    reached_digits
        The smallest number of digits, relative to the complex coefficient, that the errors leave.
        A coefficient that cannot be told from zero is measured against the terms that cancel in
        it; exact coefficients do not count.
    balls
        Order -> ball, real where theory says that the imaginary part vanishes; empty for mpmath.
    """

    orders: tuple[int, int]
    arithmetic: ArithmeticName
    proven: bool
    values: Mapping[int, mpmath.mpc]
    errors: Mapping[int, mpmath.mpf]
    reached_digits: int
    balls: Mapping[int, Ball] = field(default_factory=dict, repr=False)


def integrate_feynman(
    point: OnePoint | TwoPoint,
    powers: tuple[int, ...],
    dimension: int,
    orders: tuple[int, int],
    conventions: Conventions,
    *,
    digits: int = 12,
    arithmetic: ArithmeticName = "balls",
) -> QuadratureResult:
    """Integrate the Feynman-parameter representation of a tadpole or bubble.

    Parameters
    ----------
    point
        Kinematics in the same units as `conventions.mu_squared`.
    powers
        One integer for a `OnePoint`, two positive integers for a `TwoPoint`.
    dimension
        d0 in d = d0 - 2 eps, from 1 to 12.
    orders
        Inclusive range (lowest, highest) of powers of epsilon.
    conventions
        Measure, propagator sign and mu^2.
    digits
        Relative accuracy aimed at for each complex coefficient.  Precision is raised a few times;
        what was reached is in the result.
    arithmetic
        "balls": proven enclosures.  "mpmath": mpmath's arithmetic and tanh-sinh rule, estimates.

    Raises
    ------
    UnsupportedIntegralError
        If a power of a bubble is below 1, or the parameter integral diverges at eps = 0.
    InputError
        For an unknown arithmetic or malformed powers, dimension, orders or digits.

    Examples
    --------
    >>> from loopint.core.conventions import Conventions
    >>> from loopint.core.numbers import exact_complex, exact_real
    >>> at_threshold = TwoPoint(exact_real(4), exact_complex(1), exact_complex(1))
    >>> result = integrate_feynman(at_threshold, (1, 1), 4, (-1, 0), Conventions())
    >>> mpmath.nstr(result.values[0].real, 12)  # 2 - log m^2
    '2.0'
    """
    orders = check_orders(orders)
    _check(point, powers, dimension, digits)
    if arithmetic == "balls":
        if _is_zero(point, powers):
            return _exact_zeros(orders, "balls", digits)
        return _with_balls(_Task(point, powers, dimension, orders, conventions), digits)
    if arithmetic == "mpmath":
        if _is_zero(point, powers):
            return _exact_zeros(orders, "mpmath", digits)
        return _with_mpmath(_Task(point, powers, dimension, orders, conventions), digits)
    raise InputError(f"arithmetic = {arithmetic!r} is unknown; accepted: 'balls' or 'mpmath'")


def _check(
    point: OnePoint | TwoPoint, powers: tuple[int, ...], dimension: int, digits: int
) -> None:
    expected = 1 if isinstance(point, OnePoint) else 2
    if len(powers) != expected or any(type(n) is not int for n in powers):
        raise InputError(f"powers = {powers!r}; accepted: {expected} integer(s) for this point")
    if type(dimension) is not int or dimension not in DIMENSIONS:
        raise InputError(f"dimension = {dimension!r}; accepted: an integer from 1 to 12")
    if type(digits) is not int or digits < 1:
        raise InputError(f"digits = {digits!r}; accepted: an integer of at least 1")
    if isinstance(point, TwoPoint) and point.region is not Region.SCALELESS:
        _check_convergence(point, (powers[0], powers[1]), dimension)


def _check_convergence(point: TwoPoint, powers: tuple[int, int], dimension: int) -> None:
    n1, n2 = powers
    if min(powers) < 1:
        raise UnsupportedIntegralError(
            f"powers = {powers} have no Feynman-parameter integral; accepted: powers of at least 1"
        )
    exponent = fmpq(dimension, 2) - n1 - n2
    at_0, at_1, inside = zero_orders(resolve_on_shell(point))
    # The weight at x = 0 (where Q = m2^2) is x^(n1-1), at x = 1 (Q = m1^2) it is (1-x)^(n2-1).
    places = ((at_0, n1, "m2 = 0"), (at_1, n2, "m1 = 0"), (inside, 1, "the threshold"))
    for order, weight, place in places:
        if order and order * exponent + weight <= 0:
            raise UnsupportedIntegralError(
                f"powers = {powers} in dimension {dimension}: the Feynman-parameter integral "
                f"diverges at eps = 0 because of {place}; accepted: powers and a dimension for "
                "which it converges"
            )


def _is_zero(point: OnePoint | TwoPoint, powers: tuple[int, ...]) -> bool:
    if isinstance(point, OnePoint):
        return point.m_squared.is_zero or powers[0] <= 0
    return point.region is Region.SCALELESS


def _exact_zeros(
    orders: tuple[int, int], arithmetic: ArithmeticName, digits: int
) -> QuadratureResult:
    every = range(orders[0], orders[1] + 1)
    return QuadratureResult(
        orders,
        arithmetic,
        proven=arithmetic == "balls",
        values={k: mpmath.mpc(0) for k in every},
        errors={k: mpmath.mpf(0) for k in every},
        reached_digits=digits,
        balls={k: arb(0) for k in every} if arithmetic == "balls" else {},
    )


@dataclass(frozen=True, slots=True)
class _Task:
    """One integral at one point, in the form scale^exponent * prefactor * sum (-eps)^k moment_k."""

    point: OnePoint | TwoPoint
    powers: tuple[int, ...]
    dimension: int
    orders: tuple[int, int]
    conventions: Conventions

    @property
    def exponent(self) -> fmpq:
        """d0/2 - N, the power of Q at eps = 0."""
        return fmpq(self.dimension, 2) - sum(self.powers)

    @property
    def lowest(self) -> int:
        """The lowest order that can be different from zero."""
        return -pole_order(-self.exponent)

    @property
    def terms(self) -> int:
        """How many coefficients of each factor are needed."""
        return max(self.orders[1] - self.lowest + 1, 0)

    @property
    def sign(self) -> int:
        return self.conventions.propagator_sign.sign(sum(self.powers))


def _with_balls(task: _Task, digits: int) -> QuadratureResult:
    needed = bits_for_digits(digits)
    bits = round_up_to_word(needed + GUARD_BITS)
    found: dict[int, Ball] = {}
    reached = -1
    for attempt in range(ATTEMPTS):
        with working_precision(bits):
            try:
                prefactor, moments = _ball_factors(task)
            except MorePrecisionNeeded:
                bits *= 2
                continue
            found, accuracy = _combine_balls(task, prefactor, moments, trust_zero=attempt >= 2)
        reached = digits if accuracy is None else floor((accuracy - 4) / BITS_PER_DIGIT)
        if reached >= digits:
            break
        missing = needed - accuracy if accuracy is not None and accuracy > 0 else bits
        bits = round_up_to_word(bits + missing + GUARD_BITS)
    if not found:  # no zero of Q could be told from the path at any precision tried
        found = {k: arb("0 +/- inf") for k in range(task.orders[0], task.orders[1] + 1)}
    values, errors = {}, {}
    for order, ball in found.items():
        re, re_bound = mpf_with_bound(real_part(ball), digits + 3)
        im, im_bound = mpf_with_bound(imaginary_part(ball), digits + 3)
        values[order] = mpmath.mp.make_mpc((re._mpf_, im._mpf_))
        errors[order] = re_bound + im_bound
    return QuadratureResult(task.orders, "balls", True, values, errors, max(reached, 0), found)


def _ball_factors(task: _Task) -> tuple[list[Ball], list[Ball]]:
    """Return the coefficients of the prefactor and (-1)^k moment_k at the working precision."""
    point, exponent, terms = task.point, task.exponent, task.terms
    if not terms:
        return [], []
    gammas: Sequence[Ball] = scalar_prefactor(
        task.conventions.measure, task.dimension, -exponent, task.powers, terms
    )
    scale: ExactComplex
    if isinstance(point, OnePoint):
        scale = point.m_squared
        moments: list[Ball] = [arb(1), *([arb(0)] * (terms - 1))]
    else:
        scale = ExactComplex(normalisation(point))
        path = build_path(point.scaled(1 / scale.re), balls.BALLS)
        n1, n2 = task.powers
        moments = balls.integrate(path, balls.Integrand((n1, n2), exponent, terms))
        known = _exact_moment(point.scaled(1 / scale.re), (n1, n2), exponent)
        if known is not None:
            moments[0] = known.ball()
    logarithm = scale.scaled(1 / task.conventions.mu_squared).ball().log()
    powers: list[Ball] = [task.sign * (scale.ball().log() * exponent).exp()]
    for k in range(1, terms):
        powers.append(powers[-1] * -logarithm / k)
    prefactor = [_product(gammas, powers, n) for n in range(terms)]
    return prefactor, [-m if k % 2 else m for k, m in enumerate(moments)]


def _exact_moment(point: TwoPoint, powers: tuple[int, int], exponent: fmpq) -> ExactComplex | None:
    """Return Int x^(n1-1) (1-x)^(n2-1) Q^exponent dx if that is a polynomial in rationals.

    The coefficient of the ultraviolet pole is then exact, also when it vanishes.
    """
    point = resolve_on_shell(point)
    if exponent.q != 1 or exponent < 0 or (exponent > 0 and point.snapped):
        return None
    p, m1, m2 = ExactComplex(point.p_squared), point.m1_squared, point.m2_squared
    quadratic = (m2, m1 - m2 - p, p)
    polynomial = [ExactComplex(fmpq(1))]
    for _ in range(int(exponent.p)):
        longer = [ExactComplex(fmpq(0))] * (len(polynomial) + 2)
        for i, c in enumerate(polynomial):
            for j, q in enumerate(quadratic):
                longer[i + j] = longer[i + j] + c * q
        polynomial = longer
    n1, n2 = powers
    total = ExactComplex(fmpq(0))
    for j, c in enumerate(polynomial):  # Euler's beta integral
        total += c.scaled(
            fmpq(factorial(n1 + j - 1) * factorial(n2 - 1), factorial(n1 + n2 + j - 1))
        )
    return total


def _product(a: Sequence[Number], b: Sequence[Number], n: int) -> Number:
    return sum((a[j] * b[n - j] for j in range(1, n + 1)), a[0] * b[n])


def _combine_balls(
    task: _Task, prefactor: list[Ball], moments: list[Ball], *, trust_zero: bool
) -> tuple[dict[int, Ball], int | None]:
    """Return the coefficients and the smallest relative accuracy in bits (None: all exact)."""
    found: dict[int, Ball] = {}
    worst: int | None = None
    for order in range(task.orders[0], task.orders[1] + 1):
        n = order - task.lowest
        if n < 0:
            found[order] = arb(0)
            continue
        ball = found[order] = _product(prefactor, moments, n)
        bits = accuracy_bits(ball)
        if bits is None:
            continue
        if ball.contains(0):
            size = sum((abs(prefactor[j] * moments[n - j]) for j in range(n + 1)), arb(0))
            ratio = abs(ball).upper() / size
            settled = trust_zero and ratio.is_finite() and ratio > 0
            bits = floor(-float(ratio.log()) / log(2)) if settled else 0
        worst = bits if worst is None else min(worst, bits)
    return found, worst


def _with_mpmath(task: _Task, digits: int) -> QuadratureResult:
    values: dict[int, mpmath.mpc] = {}
    errors: dict[int, mpmath.mpf] = {}
    reached = 0
    for attempt, work_digits in enumerate((digits, 2 * digits + 5)):
        ctx = mpmath_arithmetic.context(work_digits)
        values, errors, reached = _mpmath_coefficients(task, ctx, digits, trust_zero=attempt > 0)
        if reached >= digits:
            break
    return QuadratureResult(task.orders, "mpmath", False, values, errors, reached)


def _mpmath_coefficients(
    task: _Task, ctx: mpmath_arithmetic.Context, digits: int, *, trust_zero: bool
) -> tuple[dict[int, mpmath.mpc], dict[int, mpmath.mpf], int]:
    """Return values, error estimates and the digits they leave."""
    prefactor, moments = _mpmath_factors(task, ctx)
    values, errors = {}, {}
    worst: int | None = None
    for order in range(task.orders[0], task.orders[1] + 1):
        n = order - task.lowest
        if n < 0:
            values[order], errors[order] = mpmath.mpc(0), mpmath.mpf(0)
            continue
        value = sum(prefactor[j] * moments[n - j].value for j in range(n + 1))
        size = sum(abs(prefactor[j]) * moments[n - j].size for j in range(n + 1))
        error = size * ctx.eps * mpmath_arithmetic.ROUNDING
        error += sum(abs(prefactor[j]) * moments[n - j].error for j in range(n + 1))
        values[order] = mpmath.mp.make_mpc(ctx.mpc(value)._mpc_)
        errors[order] = mpmath.mp.make_mpf(ctx.mpf(error)._mpf_)
        reference = size if trust_zero and abs(value) <= 4 * error else abs(value)
        if not error:
            continue
        left = int(ctx.floor(ctx.log10(reference / error))) if reference else 0
        worst = left if worst is None else min(worst, left)
    return values, errors, max(digits if worst is None else worst, 0)


def _mpmath_factors(
    task: _Task, ctx: mpmath_arithmetic.Context
) -> tuple[list[Number], list[mpmath_arithmetic.Estimate]]:
    point, exponent, terms = task.point, task.exponent, task.terms
    estimate = mpmath_arithmetic.Estimate
    if not terms:
        return [], []
    gammas = mpmath_arithmetic.scalar_prefactor(
        ctx, task.conventions.measure, task.dimension, -exponent, task.powers, terms=terms
    )
    scale: ExactComplex
    if isinstance(point, OnePoint):
        scale = point.m_squared
        zero, one = ctx.zero, ctx.one
        moments = [estimate(one, zero, one), *([estimate(zero, zero, zero)] * (terms - 1))]
    else:
        scale = ExactComplex(normalisation(point))
        path = build_path(point.scaled(1 / scale.re), mpmath_arithmetic.numbers(ctx))
        n1, n2 = task.powers
        moments = mpmath_arithmetic.integrate(ctx, path, (n1, n2), exponent, terms)
    in_units = mpmath_arithmetic.exact(ctx, scale.scaled(1 / task.conventions.mu_squared))
    rate = -ctx.log(in_units)
    log_scale = ctx.log(mpmath_arithmetic.exact(ctx, scale))
    powers = [task.sign * ctx.exp(mpmath_arithmetic.real(ctx, exponent) * log_scale)]
    for k in range(1, terms):
        powers.append(powers[-1] * rate / k)
    prefactor = [_product(gammas, powers, n) for n in range(terms)]
    alternating = [
        estimate(-m.value, m.error, m.size) if k % 2 else m for k, m in enumerate(moments)
    ]
    return prefactor, alternating
