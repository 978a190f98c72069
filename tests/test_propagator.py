"""Two-point integrals with epsilon-dependent powers against published closed forms.

mpmath evaluates the published formula at a number epsilon; the package's series is summed there.
"""

from __future__ import annotations

import random
from fractions import Fraction

import mpmath
import pytest

import loopint
from tests.reference import at_epsilon, to_mp

EPSILON = Fraction(1, 10_000)
KINDS = [
    "one_massless",
    "one_massless_complex",
    "both_massless",
    "zero_momentum",
    "equal_at_zero",
    "massless_at_zero",
    "on_shell",
    "general",
    "equal_mass",
    "complex",
]


def published(
    kind: str, p: object, m1: object, m2: object, nu1: mpmath.mpf, nu2: mpmath.mpf, h: mpmath.mpf
) -> mpmath.mpc:
    """Return the euclidean integral with N = 1, mu = 1; h = d/2; line 1 is the massless one.

    Massless: Chetyrkin, Kataev, Tkachov, Nucl. Phys. B174 (1980) 345.  One massive line: Boos,
    Davydychev, Theor. Math. Phys. 89 (1991) 1052; on shell with Gauss's sum, DLMF 15.4.20.  p = 0:
    Euler's integral, DLMF 15.6.1.  Otherwise the Feynman-parameter integral itself.
    """
    gamma, one_over = mpmath.gamma, mpmath.rgamma
    q, a, b = (mpmath.mpmathify(to_mp(x)) for x in (p, m1, m2))
    nu = nu1 + nu2
    if kind == "both_massless":
        log = mpmath.log(abs(q)) - (1j * mpmath.pi if mpmath.re(q) > 0 else 0)
        top = gamma(h - nu1) * gamma(h - nu2) * gamma(nu - h)
        return (
            top * one_over(nu1) * one_over(nu2) * one_over(2 * h - nu) * mpmath.exp((h - nu) * log)
        )
    if a == 0:
        z = q / b
        if kind == "on_shell":
            gauss = gamma(h) * gamma(2 * h - nu1 - nu) * one_over(h - nu1) * one_over(2 * h - nu)
        else:
            if mpmath.im(z) == 0 and mpmath.re(z) > 1:
                z = mpmath.mpc(z, mpmath.mpf(10) ** -(mpmath.mp.dps - 3))
            gauss = mpmath.hyp2f1(nu - h, nu1, h, z)
        return gamma(h - nu1) * gamma(nu - h) * one_over(h) * one_over(nu2) * b ** (h - nu) * gauss
    if q == 0:
        gauss = mpmath.hyp2f1(nu - h, nu1, nu, 1 - a / b)
        return gamma(nu - h) * one_over(nu) * b ** (h - nu) * gauss
    centre = (q - mpmath.re(a) + mpmath.re(b)) / (2 * q)
    path: list[object] = [0, 1]
    if mpmath.re(q) > 0 and 0 < mpmath.re(centre) < 1:
        centre = mpmath.re(centre)
        path = [
            0,
            mpmath.mpc(centre / 2, centre / 3),
            centre,
            mpmath.mpc((1 + centre) / 2, (centre - 1) / 3),
            1,
        ]

    def integrand(x: mpmath.mpc) -> mpmath.mpc:
        log = mpmath.log(1j * (q * x * x + (a - b - q) * x + b)) - 1j * mpmath.pi / 2
        return x ** (nu1 - 1) * (1 - x) ** (nu2 - 1) * mpmath.exp((h - nu) * log)

    return gamma(nu - h) * one_over(nu1) * one_over(nu2) * mpmath.quad(integrand, path)


def draw(rng: random.Random, kind: str) -> tuple[object, object, object]:
    def value(low: int, high: int) -> Fraction:
        return Fraction(rng.randint(low * 20 + 1, high * 20), 20)

    m1, m2, p = value(0, 5), value(0, 5), value(-9, 20)
    match kind:
        case "one_massless":
            return p, Fraction(0), m2
        case "one_massless_complex":
            return p, Fraction(0), (m2, -value(0, 2))
        case "both_massless":
            return p, Fraction(0), Fraction(0)
        case "zero_momentum":
            return Fraction(0), m1, m2
        case "equal_at_zero":
            return Fraction(0), m1, m1
        case "massless_at_zero":
            return Fraction(0), Fraction(0), m2
        case "on_shell":
            return m2, Fraction(0), m2
        case "equal_mass":
            return p, m1, m1
        case "complex":
            return p, (m1, -value(0, 1)), m2
    return p, m1, m2


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("seed", range(8))
def test_published_closed_forms(kind: str, seed: int) -> None:
    rng = random.Random(f"{kind}{seed}")
    dimension = rng.randint(2, 7)
    lowest = 1 if kind in {"general", "equal_mass", "complex"} else -1
    rates = [Fraction(0), Fraction(1), Fraction(1, 2), Fraction(2)]
    first = (rng.randint(lowest, 3), rng.choice(rates))
    second = (rng.randint(lowest, 3), rng.choice(rates[1:]))
    if kind == "massless_at_zero":
        first = (rng.randint(1, 3), rng.choice(rates))
    p, m1, m2 = draw(rng, kind)
    with mpmath.workdps(55):
        e = to_mp(EPSILON)
        nu1, nu2 = (n + to_mp(a) * e for n, a in (first, second))
        expected = published(kind, p, m1, m2, nu1, nu2, mpmath.mpf(dimension) / 2 - e)
        expected *= mpmath.exp(mpmath.euler * e - 1j * mpmath.pi * (nu1 + nu2))
        powers = (first, second)
        if seed % 2:
            m1, m2, powers = m2, m1, (second, first)
        series = loopint.propagator(
            p, m1, m2, powers, dimension=dimension, orders=(-3, 10), digits=35
        )
        assert series.status == "ok"
        assert abs(at_epsilon(series, e) - expected) < mpmath.mpf(10) ** -25 * (
            mpmath.mpf(10) ** -4 + abs(expected)
        )


@pytest.mark.parametrize("kind", ["one_massless", "general", "zero_momentum", "both_massless"])
def test_integer_powers_are_the_bubble(kind: str) -> None:
    p, m1, m2 = draw(random.Random(kind), kind)
    one = loopint.propagator(p, m1, m2, (2, (1, 0)), orders=(-2, 2))
    two = loopint.bubble(p, m1, m2, (2, 1), orders=(-2, 2))
    assert all(one[k] == two[k] for k in one)


def test_massless_subloop() -> None:
    """Two loops: a massless bubble inserted in a massless line of a massless bubble.

    The inner loop is G(1,1) (-q^2)^(-eps) (Chetyrkin, Kataev, Tkachov 1980), so the outer one is
    P(1 + eps, 1); the product of G-functions is the published two-loop value.
    """
    with mpmath.workdps(50):
        e = to_mp(EPSILON)
        series = loopint.propagator(
            -1, 0, 0, ((1, 1), 1), orders=(-3, 9), digits=45, measure="plain",
            propagator_sign="euclidean",
        )  # fmt: skip
        g = mpmath.gamma
        h = 2 - e
        expected = g(h - 1 - e) * g(h - 1) * g(2 + e - h) / (g(1 + e) * g(2 * h - 2 - e))
        assert abs(at_epsilon(series, e) / expected - 1) < mpmath.mpf(10) ** -33


def test_lerch_is_used_where_the_parameters_reduce_to_it() -> None:
    """nu = (1, 2-2 eps), d0 = 4: 2F1(1-eps, 1; 2-eps; z) = (1-eps) Phi(z, 1, 1-eps)."""
    for p in ("-3", "0.7", "2.5"):
        series = loopint.propagator(p, 0, 1, (1, (2, -2)), orders=(-1, 8), digits=40)
        assert series.method == "lerch"
        with mpmath.workdps(50):
            e = to_mp(EPSILON)
            nu1, nu2 = mpmath.mpf(1), 2 - 2 * e
            expected = published(
                "one_massless", Fraction(p), Fraction(0), Fraction(1), nu1, nu2, 2 - e
            )
            expected *= mpmath.exp(mpmath.euler * e - 1j * mpmath.pi * (nu1 + nu2))
            assert abs(at_epsilon(series, e) / expected - 1) < mpmath.mpf(10) ** -28


def test_methods() -> None:
    def method(p: object, m1: object, m2: object, powers: object) -> str:
        return loopint.propagator(p, m1, m2, powers, orders=(-1, 0), digits=10).method

    assert method(-1, 0, 0, ((1, 1), 1)) == "gamma"
    assert method(-1, 0, 1, ((1, 1), 1)) == "hypergeometric"
    assert method(1, 0, 1, ((1, 1), 1)) == "gamma"
    assert method(0, 1, 2, ((1, 1), 1)) == "hypergeometric"
    assert method(3, 1, 2, ((1, 1), 1)) == "quadrature"
    assert method(0, 0, 0, ((1, 1), 1)) == "exact"
    assert method(3, 1, 2, ((1, 1), -1)) == "gamma"


def test_scale_enters_only_once() -> None:
    """mu^2 enters as (mu^2)^eps whatever the powers."""
    with mpmath.workdps(50):
        e = to_mp(EPSILON)
        one = loopint.propagator("-2", 0, 1, ((1, 1), 1), orders=(-2, 9), digits=40)
        two = loopint.propagator("-2", 0, 1, ((1, 1), 1), orders=(-2, 9), digits=40, mu_squared=3)
        ratio = at_epsilon(two, e) / at_epsilon(one, e)
        assert abs(ratio - mpmath.mpf(3) ** e) < mpmath.mpf(10) ** -30


def test_unregulated_powers_are_an_error() -> None:
    """Gamma(d/2 - nu) with nu = 2 - eps in d0 = 4 is Gamma(0) at every eps."""
    with pytest.raises(loopint.UnregulatedError, match="not regulated"):
        loopint.propagator(-1, 0, 0, ((2, -1), (1, 1)))


@pytest.mark.parametrize("powers", [((1, "x"), 1), ((1.5, 1), 1), (1,), ((1, 1, 1), 1), None, 3])
def test_bad_powers_are_named(powers: object) -> None:
    if powers is None:
        powers = "1,1"
    with pytest.raises(loopint.InputError, match="powers"):
        loopint.propagator(1, 0, 0, powers)  # type: ignore[arg-type]
