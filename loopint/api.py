"""The functions a Python user calls: one integral at one point."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from loopint.core.conventions import Conventions
from loopint.core.errors import InputError
from loopint.core.kinematics import OnePoint, TwoPoint, check_mass_squared, snap_to_threshold
from loopint.core.numbers import exact_complex, exact_real
from loopint.integrals.proof import DEFAULT_MAX_PRECISION_BITS
from loopint.integrals.registry import Integral, evaluate

if TYPE_CHECKING:
    from flint import fmpq

    from loopint.core.laurent import LaurentSeries
    from loopint.core.numbers import ComplexInput, ExactComplex, RealInput


def tadpole(
    m_squared: ComplexInput,
    power: int = 1,
    *,
    dimension: int = 4,
    orders: tuple[int, int] = (-1, 2),
    digits: int = 30,
    mu_squared: RealInput = 1,
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
    max_precision_bits: int = DEFAULT_MAX_PRECISION_BITS,
) -> LaurentSeries:
    """Evaluate the one-propagator integral A(n) of a squared mass.

    A(n) = N(eps) (mu^2)^eps Int d^dq/(i pi^(d/2)) 1/(q^2 - m^2 + i0)^n, with d = dimension - 2 eps.

    Parameters
    ----------
    m_squared
        Squared mass: real >= 0, or complex with Im <= 0 (m^2 - i m Gamma).  Any exact input of
        `loopint.core.numbers.exact_complex`; a float counts as its exact binary value.
    power
        Integer power n of the propagator.  For n <= 0, and for m = 0, the result is exactly 0.
    dimension
        d0, an integer from 1 to 12.
    orders
        Inclusive range of powers of epsilon; orders below the pole are exact zeros.
    digits
        |error| <= 10^-digits |value| for each coefficient, 5 to 2000.
    mu_squared
        Renormalisation scale squared, > 0, in the units of m_squared.
    propagator_sign
        "minkowski", or "euclidean" for 1/(m^2 - q^2 - i0).
    measure
        N(eps): "msbar", "plain", "gamma", "r_gamma" or "two_pi"; see
        `loopint.core.conventions.Measure`.
    max_precision_bits
        Cap on the working precision.  If it is reached first, `status` is "below_digits" and the
        bounds say what was proven.

    Returns
    -------
    LaurentSeries
        In units of (m_squared)^(d0/2 - n).

    Raises
    ------
    InputError
        For an argument outside the ranges above.

    Examples
    --------
    m^2 (1/eps + 1 - log(m^2/mu^2)) for m^2 = 3, mu^2 = 1:

    >>> series = tadpole(3, orders=(-1, 0), digits=15)
    >>> print(series[-1].real, series[0].real)
    3.0 -0.295836866004329
    """
    integral = Integral.parse("tadpole", power, dimension, orders)
    point = OnePoint(_mass("m_squared", m_squared))
    conventions = Conventions.parse(measure, propagator_sign, mu_squared)
    return evaluate(
        integral, point, conventions, digits=digits, max_precision_bits=max_precision_bits
    ).rounded()


def bubble(
    p_squared: RealInput,
    m1_squared: ComplexInput,
    m2_squared: ComplexInput,
    powers: tuple[int, int] = (1, 1),
    *,
    dimension: int = 4,
    orders: tuple[int, int] = (-1, 2),
    digits: int = 30,
    mu_squared: RealInput = 1,
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
    max_precision_bits: int = DEFAULT_MAX_PRECISION_BITS,
    snap_tolerance: RealInput = 0,
) -> LaurentSeries:
    """Evaluate the two-propagator integral B(n1, n2).

    B = N(eps) (mu^2)^eps Int d^dq/(i pi^(d/2))
    1/[(q^2 - m1^2 + i0)^n1 ((q+p)^2 - m2^2 + i0)^n2], with d = dimension - 2 eps.

    Parameters
    ----------
    p_squared
        Real external momentum squared, any sign, understood as p^2 + i0.
    m1_squared, m2_squared
        Squared masses: real >= 0, or complex with Im <= 0.
    powers
        The two powers (n1, n2).
    snap_tolerance
        Relative distance within which a point is moved onto its threshold or pseudothreshold
        (default 0: never).  `region` then ends in "_snapped".
    dimension, orders, digits, mu_squared, propagator_sign, measure, max_precision_bits
        As for `tadpole`.

    Returns
    -------
    LaurentSeries
        In units of (p_squared)^(d0/2 - n1 - n2).

    Raises
    ------
    InputError
        For an argument outside its range.
    UnsupportedIntegralError
        For powers or a dimension that are not covered.

    Examples
    --------
    At threshold of two equal masses the finite part is 2 - log(m^2/mu^2), here 2:

    >>> series = bubble(4, 1, 1, orders=(-1, 0), digits=10)
    >>> series.region, print(series[0].real)
    2.0
    ('threshold', None)
    """
    integral = Integral.parse("bubble", powers, dimension, orders)
    point = TwoPoint(
        _real("p_squared", p_squared),
        _mass("m1_squared", m1_squared),
        _mass("m2_squared", m2_squared),
    )
    point = snap_to_threshold(point, _tolerance(snap_tolerance))
    conventions = Conventions.parse(measure, propagator_sign, mu_squared)
    return evaluate(
        integral, point, conventions, digits=digits, max_precision_bits=max_precision_bits
    ).rounded()


def _real(name: str, value: Any) -> fmpq:  # noqa: ANN401 - anything a user may pass
    try:
        return exact_real(value)
    except InputError as error:
        raise InputError(f"{name}: {error}") from None


def _mass(name: str, value: Any) -> ExactComplex:  # noqa: ANN401
    try:
        number = exact_complex(value)
    except InputError as error:
        raise InputError(f"{name}: {error}") from None
    return check_mass_squared(number, name)


def _tolerance(value: RealInput) -> fmpq:
    tolerance = _real("snap_tolerance", value)
    if not 0 <= tolerance < 1:
        raise InputError(f"snap_tolerance = {value}; accepted: 0 <= snap_tolerance < 1")
    return tolerance
