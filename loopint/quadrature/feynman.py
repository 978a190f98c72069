"""The Feynman-parameter representation of one- and two-point integrals, as Laurent coefficients.

    P(nu1,nu2) = sign * N(eps) (mu^2)^eps Gamma(nu-d/2) / (Gamma(nu1) Gamma(nu2))
                 * Int_0^1 dx x^(nu1-1) (1-x)^(nu2-1) Q(x)^(d/2-nu),      nu = nu1 + nu2,
    Q(x)       = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0,      nu_i = n_i + a_i eps.

The integrand is expanded in eps, so that each order needs one more power of the logarithm
a1 log x + a2 log(1-x) - (1+a1+a2) log Q; a divergence at an end, or at threshold, is continued
analytically in eps.  A tadpole has no integral left; its Gamma function and power are evaluated
with other code than the closed form uses.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import factorial, floor, log
from typing import TYPE_CHECKING, Literal, TypeAlias

import mpmath
from flint import acb, arb, fmpq

from loopint.core.errors import InputError, MorePrecisionNeeded
from loopint.core.kinematics import OnePoint, TwoPoint
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
from loopint.quadrature import balls, mpmath_arithmetic, mpmath_numbers, mpmath_prefactor
from loopint.quadrature.exponents import Power, parse_power
from loopint.quadrature.paths import build_path, normalisation, resolve_on_shell
from loopint.quadrature.prefactor import scalar_prefactor
from loopint.quadrature.representation import Representation
from loopint.quadrature.residues import exact_pole

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from loopint.core.conventions import Conventions
    from loopint.core.epsilon_linear import EpsilonLinear
    from loopint.quadrature.mpmath_numbers import Context
    from loopint.quadrature.paths import Number

ArithmeticName: TypeAlias = Literal["balls", "mpmath"]
GUARD_BITS = 20
MARGIN_BITS = 32
ATTEMPTS = 5
DIMENSIONS = range(1, 21)  # four derivatives with respect to p^2 raise 12 to 20


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
        A coefficient that cannot be told from zero is measured against the largest of the terms
        that cancel in it; exact coefficients do not count.
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
    powers: tuple[Power, ...],
    dimension: int,
    orders: tuple[int, int],
    conventions: Conventions,
    *,
    digits: int = 12,
    arithmetic: ArithmeticName = "balls",
    attempts: int = ATTEMPTS,
) -> QuadratureResult:
    """Integrate the Feynman-parameter representation of a one- or two-point integral.

    Parameters
    ----------
    point
        Kinematics in the same units as `conventions.mu_squared`.
    powers
        One for a `OnePoint`, two for a `TwoPoint`; each is an integer n, or a pair (n, a) meaning
        n + a eps with a rational a.
    dimension
        d0 in d = d0 - 2 eps, from 1 to 20.
    orders
        Inclusive range (lowest, highest) of powers of epsilon.
    conventions
        Measure, propagator sign and mu^2.
    digits
        Relative accuracy aimed at for each complex coefficient.  Precision is raised a few times;
        what was reached is in the result.
    arithmetic
        "balls": proven enclosures.  "mpmath": mpmath's arithmetic and tanh-sinh rule, estimates.
    attempts
        How many precisions to try with balls.

    Notes
    -----
    Orders below the lowest pole that the Gamma functions and the ends of the parameter integral
    allow are exactly zero.  Where poles cancel for another reason the coefficient is a ball (or a
    value with an error) that contains zero.

    Raises
    ------
    UnsupportedIntegralError
        If a power of a two-point integral is an integer below 1, for every eps.
    UnregulatedError
        If a divergence of the integral is there for every eps.
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
    task = Representation(point, _parse(point, powers), dimension, orders, conventions)
    _check(task, digits)
    if arithmetic not in ("balls", "mpmath"):
        raise InputError(f"arithmetic = {arithmetic!r} is unknown; accepted: 'balls' or 'mpmath'")
    if task.is_zero:
        return _exact_zeros(orders, arithmetic, digits)
    task.check_existence()
    if arithmetic == "balls":
        return _with_balls(task, digits, attempts)
    return _with_mpmath(task, digits)


def _parse(point: OnePoint | TwoPoint, powers: tuple[Power, ...]) -> tuple[EpsilonLinear, ...]:
    expected = 1 if isinstance(point, OnePoint) else 2
    if not isinstance(powers, tuple | list) or len(powers) != expected:
        raise InputError(f"powers = {powers!r}; accepted: {expected} power(s) for this point")
    return tuple(parse_power(power) for power in powers)


def _check(task: Representation, digits: int) -> None:
    if type(task.dimension) is not int or task.dimension not in DIMENSIONS:
        raise InputError(f"dimension = {task.dimension!r}; accepted: an integer from 1 to 20")
    if type(digits) is not int or digits < 1:
        raise InputError(f"digits = {digits!r}; accepted: an integer of at least 1")


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


def _with_balls(task: Representation, digits: int, attempts: int) -> QuadratureResult:
    needed = bits_for_digits(digits)
    bits = round_up_to_word(needed + GUARD_BITS)
    found: dict[int, Ball] = {}
    reached = -1
    for _ in range(attempts):
        with working_precision(bits):
            try:
                prefactor, moments = _ball_factors(task)
            except MorePrecisionNeeded:
                bits *= 2
                continue
            found, accuracy = _combine_balls(task, prefactor, moments, needed=needed)
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


def _ball_factors(task: Representation) -> tuple[list[Ball], list[Ball]]:
    """Return the coefficients of the prefactor and of the integral at the working precision."""
    point, exponent, terms = task.point, task.exponent, task.terms
    if not terms:
        return [], []
    gammas: Sequence[Ball] = scalar_prefactor(
        task.conventions.measure, task.dimension, task.gamma, task.powers, terms
    )
    scale: ExactComplex
    if isinstance(point, OnePoint):
        scale = point.m_squared
        moments: list[Ball] = [arb(1), *([arb(0)] * (terms - 1))]
    else:
        scale = ExactComplex(normalisation(point))
        scaled = point.scaled(1 / scale.re)
        moments = balls.integrate(build_path(scaled, balls.BALLS), task.integrand)
        known = _exact_moment(scaled, task.powers, exponent.constant)
        if task.integrand_lowest == -1:
            known = exact_pole(task.integrand, scaled)
        if known is not None:
            moments[0] = known.ball()
    mu = task.conventions.mu_squared
    # (scale)^(d/2-nu) (mu^2)^eps; the logarithm of scale/mu^2 vanishes exactly where it should.
    rate = scale.scaled(1 / mu).ball().log() * exponent.rate
    if exponent.rate != -1 and mu != 1:
        rate = rate + arb(mu).log() * (1 + exponent.rate)
    if task.phase_rate != 0:
        rate = rate + acb(0, -arb.pi() * task.phase_rate)
    powers: list[Ball] = [task.sign * (scale.ball().log() * exponent.constant).exp()]
    for k in range(1, terms):
        powers.append(powers[-1] * rate / k)
    return [_product(gammas, powers, n) for n in range(terms)], moments


def _exact_moment(
    point: TwoPoint, powers: tuple[EpsilonLinear, ...], exponent: fmpq
) -> ExactComplex | None:
    """Return Int x^(n1-1) (1-x)^(n2-1) Q^exponent dx if that is a polynomial in rationals.

    The coefficient of the ultraviolet pole is then exact, also when it vanishes.
    """
    point = resolve_on_shell(point)
    n1, n2 = (int(power.constant.p) for power in powers)
    if exponent.q != 1 or exponent < 0 or (exponent > 0 and point.snapped) or min(n1, n2) < 1:
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
    total = ExactComplex(fmpq(0))
    for j, c in enumerate(polynomial):  # Euler's beta integral
        total += c.scaled(
            fmpq(factorial(n1 + j - 1) * factorial(n2 - 1), factorial(n1 + n2 + j - 1))
        )
    return total


def _product(a: Sequence[Number], b: Sequence[Number], n: int) -> Number:
    return sum((a[j] * b[n - j] for j in range(1, n + 1)), a[0] * b[n])


def _combine_balls(
    task: Representation, prefactor: list[Ball], moments: list[Ball], *, needed: int
) -> tuple[dict[int, Ball], int | None]:
    """Return the coefficients and the smallest relative accuracy in bits (None: all exact).

    A coefficient counts as zero if it is below the terms that cancel in it by more than twice
    the bits needed.
    """
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
            ratio = abs(ball).upper() / (_largest(prefactor) * _largest(moments))
            bits = floor(-float(ratio.log()) / log(2)) if ratio.is_finite() and ratio > 0 else 0
            if bits < 2 * needed + MARGIN_BITS:
                bits = 0
        worst = bits if worst is None else min(worst, bits)
    return found, worst


def _largest(values: list[Ball]) -> arb:
    return max((abs(value).upper() for value in values), key=float)


def _with_mpmath(task: Representation, digits: int) -> QuadratureResult:
    values: dict[int, mpmath.mpc] = {}
    errors: dict[int, mpmath.mpf] = {}
    reached = 0
    for attempt, work_digits in enumerate((digits, 2 * digits + 5)):
        ctx = mpmath_numbers.context(work_digits)
        values, errors, reached = _mpmath_coefficients(task, ctx, digits, trust_zero=attempt > 0)
        if reached >= digits:
            break
    return QuadratureResult(task.orders, "mpmath", False, values, errors, reached)


def _mpmath_coefficients(
    task: Representation, ctx: Context, digits: int, *, trust_zero: bool
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
        error = size * ctx.eps * mpmath_numbers.ROUNDING
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
    task: Representation, ctx: Context
) -> tuple[list[Number], list[mpmath_numbers.Estimate]]:
    point, exponent, terms = task.point, task.exponent, task.terms
    estimate, real, exact = mpmath_numbers.Estimate, mpmath_numbers.real, mpmath_numbers.exact
    if not terms:
        return [], []
    gammas = mpmath_prefactor.scalar_prefactor(
        ctx, task.conventions.measure, task.dimension, task.gamma, task.powers, terms=terms
    )
    scale: ExactComplex
    if isinstance(point, OnePoint):
        scale = point.m_squared
        zero, one = ctx.zero, ctx.one
        moments = [estimate(one, zero, one), *([estimate(zero, zero, zero)] * (terms - 1))]
    else:
        scale = ExactComplex(normalisation(point))
        path = build_path(point.scaled(1 / scale.re), mpmath_numbers.numbers(ctx))
        moments = mpmath_arithmetic.integrate(ctx, path, task.integrand)
    mu = task.conventions.mu_squared
    rate = ctx.log(exact(ctx, scale.scaled(1 / mu))) * real(ctx, exponent.rate)
    rate += ctx.log(real(ctx, mu)) * real(ctx, 1 + exponent.rate)
    if task.phase_rate != 0:
        rate -= ctx.j * ctx.pi * real(ctx, task.phase_rate)
    powers = [task.sign * ctx.exp(real(ctx, exponent.constant) * ctx.log(exact(ctx, scale)))]
    for k in range(1, terms):
        powers.append(powers[-1] * rate / k)
    return [_product(gammas, powers, n) for n in range(terms)], moments
