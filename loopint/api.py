"""The functions a Python user calls: one integral at one point."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, TypeAlias

from loopint.core.conventions import Conventions
from loopint.core.errors import InputError
from loopint.core.kinematics import OnePoint, TwoPoint, check_mass_squared, snap_to_threshold
from loopint.core.numbers import exact_complex, exact_real
from loopint.integrals.proof import DEFAULT_MAX_PRECISION_BITS
from loopint.integrals.registry import Integral, evaluate

if TYPE_CHECKING:
    from collections.abc import Sequence

    from flint import fmpq

    from loopint.core.laurent import LaurentSeries
    from loopint.core.numbers import ComplexInput, ExactComplex, RealInput
    from loopint.formulas.formula import Formula

    PowerInput: TypeAlias = int | tuple[int, RealInput]


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
    derivatives: str | Sequence[str] = (),
) -> LaurentSeries:
    """Evaluate the one-propagator integral A(n) of a squared mass, or a derivative of it.

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
    derivatives
        "m_squared" for dA/dm^2, ("m_squared", "m_squared") for the second derivative, up to the
        fourth; by default the integral itself.

    Returns
    -------
    LaurentSeries
        In units of (m_squared)^(d0/2 - n), less one power for each derivative.

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
    integral = Integral.parse("tadpole", power, dimension, orders, derivatives)
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
    derivatives: str | Sequence[str] = (),
) -> LaurentSeries:
    """Evaluate the two-propagator integral B(n1, n2), or a derivative of it.

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
    derivatives
        "p_squared", "m1_squared" or "m2_squared" for a first derivative with the two other
        variables fixed; a tuple of names for a higher or mixed one, up to four.  By default the
        integral itself.  `region` ends in "_isolated" where dimensional regularisation gives a
        value but nearby points have no limit, such as d/dp^2 at threshold.
    dimension, orders, digits, mu_squared, propagator_sign, measure, max_precision_bits
        As for `tadpole`.

    Returns
    -------
    LaurentSeries
        In units of (p_squared)^(d0/2 - n1 - n2), less one power for each derivative.

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

    The slope at p^2 = 0 of two equal masses is 1/(6 m^2):

    >>> slope = bubble(0, "2/3", "2/3", orders=(0, 0), derivatives="p_squared")
    >>> print(slope[0].real)
    0.25
    """
    integral = Integral.parse("bubble", powers, dimension, orders, derivatives)
    point = _two_point(p_squared, m1_squared, m2_squared, snap_tolerance)
    conventions = Conventions.parse(measure, propagator_sign, mu_squared)
    return evaluate(
        integral, point, conventions, digits=digits, max_precision_bits=max_precision_bits
    ).rounded()


def propagator(
    p_squared: RealInput,
    m1_squared: ComplexInput,
    m2_squared: ComplexInput,
    powers: tuple[PowerInput, PowerInput],
    *,
    dimension: int = 4,
    orders: tuple[int, int] = (-1, 2),
    digits: int = 30,
    mu_squared: RealInput = 1,
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
    max_precision_bits: int = DEFAULT_MAX_PRECISION_BITS,
    snap_tolerance: RealInput = 0,
    derivatives: str | Sequence[str] = (),
) -> LaurentSeries:
    """Evaluate a two-point integral whose powers may depend on epsilon.

    The same integral as `bubble` with powers n + a eps, as they arise when a massless subloop sits
    on a line.  mu^2 enters as (mu^2)^eps; the sign (-1)^(n + a eps) reads exp(-i pi (n + a eps)).

    Parameters
    ----------
    powers
        Each an integer n, or a pair (n, a) for n + a eps with a rational a ("1/2", 0.5, ...).
    p_squared, m1_squared, m2_squared, snap_tolerance, derivatives
        As for `bubble`.
    dimension, orders, digits, mu_squared, propagator_sign, measure, max_precision_bits
        As for `tadpole`.

    Returns
    -------
    LaurentSeries
        In units of (p_squared)^(d0/2 - n1 - n2), less one power for each derivative.  `method` is
        "quadrature" where no closed form exists (two masses, p^2 != 0); the bounds are proven all
        the same.

    Raises
    ------
    InputError
        For an argument outside its range.
    UnregulatedError
        For powers that dimensional regularisation leaves divergent at every eps.
    UnsupportedIntegralError
        For powers that are not covered: with two masses and p^2 != 0, a power n + a eps with
        n <= 0 and a != 0.

    Examples
    --------
    >>> series = propagator(-1, 0, 0, ((1, 1), 1), orders=(-1, 0), digits=10)
    >>> print(series)
    LaurentSeries, 10 digits, region spacelike, method gamma, status ok
      eps^-1  (0.5 + 0.0j)  +/- 0.0
      eps^0   (1.5 - 1.570796327j)  +/- 1.7e-13
    """
    integral = Integral.parse("propagator", powers, dimension, orders, derivatives)
    point = _two_point(p_squared, m1_squared, m2_squared, snap_tolerance)
    conventions = Conventions.parse(measure, propagator_sign, mu_squared)
    return evaluate(
        integral, point, conventions, digits=digits, max_precision_bits=max_precision_bits
    ).rounded()


def formula(
    family: str,
    powers: int | tuple[PowerInput, ...] | None = None,
    *,
    kinematics: str = "general",
    dimension: int = 4,
    orders: tuple[int, int] = (-1, 2),
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
) -> Formula:
    """Return the closed form of an integral and its Laurent coefficients as formulas.

    Parameters
    ----------
    family
        "tadpole", "bubble" or "propagator".
    powers
        Integer powers, in a propagator also pairs (n, a) for n + a eps; by default 1 for every
        propagator.
    kinematics
        For a bubble or propagator a name of `loopint.integrals.reduction.Kinematics`: "general",
        "equal_mass", "one_massless", "both_massless", "zero_momentum", "zero_momentum_equal_mass",
        "zero_momentum_one_massless", "threshold", "pseudothreshold" or "on_shell".
    dimension
        d0, an integer from 1 to 12; d = d0 - 2 eps.
    orders
        Inclusive range of powers of epsilon, at most through 8.
    propagator_sign, measure
        As for `tadpole`; they are part of the formula, as is mu^2.

    Returns
    -------
    Formula
        `closed_form` and `coefficients` are sympy expressions; `as_text`, `as_latex`, `as_python`
        and `as_sympy` print them with their domain, i0 prescription and sources.  A propagator with
        two scales has its coefficients in even dimensions only; in odd ones it has a closed form in
        d dimensions and no coefficients.

    Raises
    ------
    InputError
        For an argument outside the ranges above.
    UnsupportedIntegralError
        For powers or orders that are not covered.

    Examples
    --------
    >>> formula("tadpole").coefficients[-1]
    m_squared
    >>> formula("bubble", kinematics="both_massless").coefficients[0].subs({"p_squared": -1})
    2 - log(1/mu_squared)
    """
    from loopint.formulas.build import build_formula  # noqa: PLC0415 - sympy is slow to import

    return build_formula(
        family,
        powers,
        kinematics=kinematics,
        dimension=dimension,
        orders=orders,
        propagator_sign=propagator_sign,
        measure=measure,
    )


def _two_point(
    p_squared: RealInput,
    m1_squared: ComplexInput,
    m2_squared: ComplexInput,
    snap_tolerance: RealInput,
) -> TwoPoint:
    point = TwoPoint(
        _real("p_squared", p_squared),
        _mass("m1_squared", m1_squared),
        _mass("m2_squared", m2_squared),
    )
    return snap_to_threshold(point, _tolerance(snap_tolerance))


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
