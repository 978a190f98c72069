"""Bubbles with any integer powers and dimensions against mpmath at a number epsilon."""

from __future__ import annotations

import itertools
import random
from collections.abc import Iterator
from fractions import Fraction

import mpmath
import pytest

import loopint
from tests.reference import at_epsilon, to_mp

EPSILON = Fraction(1, 10_000)
KINDS = [
    "general",
    "complex",
    "one_massless",
    "both_massless",
    "zero_momentum",
    "equal_at_zero",
    "massless_at_zero",
    "threshold",
    "pseudothreshold",
    "on_shell",
]


def feynman_integral(
    p: mpmath.mpf, a: mpmath.mpc, b: mpmath.mpc, i: int, j: int, s: mpmath.mpf, kind: str
) -> mpmath.mpc:
    """Return Int x^i (1-x)^j Q^s dx, continued analytically in s.

    Beta functions (DLMF 5.12.1) and Euler's integral (DLMF 15.6.1) where Q factorises, quadrature
    along a path with Im Q < 0 where Q has no zero on it.
    """
    beta, gauss = mpmath.beta, mpmath.hyp2f1
    if kind == "both_massless":
        phase = mpmath.log(abs(p)) - (1j * mpmath.pi if p > 0 else 0)
        return mpmath.exp(s * phase) * beta(i + 1 + s, j + 1 + s)
    if kind == "equal_at_zero":
        return beta(i + 1, j + 1) * b**s
    if kind == "zero_momentum":
        return beta(i + 1, j + 1) * b**s * gauss(-s, i + 1, i + j + 2, 1 - a / b)
    if kind == "massless_at_zero":
        return b**s * beta(i + 1, j + 1 + s)
    if kind == "on_shell":
        return b**s * beta(i + 1, j + 1 + 2 * s)
    if kind == "one_massless":  # Q = (1-x)(b - x p)
        z = p / b
        if z > 1:
            z = z + mpmath.mpc(0, mpmath.mpf(10) ** -(mpmath.mp.dps - 3))
        return b**s * beta(i + 1, j + 1 + s) * gauss(-s, i + 1, i + j + 2 + s, z)
    centre = (p - mpmath.re(a) + mpmath.re(b)) / (2 * p)
    if kind == "threshold":  # both sides of the double zero

        def side(y: mpmath.mpf, i: int, j: int) -> mpmath.mpf:
            scale = y ** (i + 1 + 2 * s) * beta(i + 1, 2 * s + 1)
            return scale * gauss(-j, i + 1, i + 2 + 2 * s, y)

        return p**s * (side(centre, i, j) + side(1 - centre, j, i))
    if kind == "pseudothreshold":
        return mpmath.quad(lambda x: x**i * (1 - x) ** j * (p * (x - centre) ** 2) ** s, [0, 1])
    path: list[mpmath.mpc] = [0, 1]
    if p > 0 and 0 < centre < 1:
        left, right = (
            mpmath.mpc(centre / 2, centre / 3),
            mpmath.mpc((1 + centre) / 2, (centre - 1) / 3),
        )
        path = [0, left, centre, right, 1]

    def integrand(x: mpmath.mpc) -> mpmath.mpc:
        q = p * x * x + (a - b - p) * x + b
        log = mpmath.log(1j * q) - 1j * mpmath.pi / 2
        return x**i * (1 - x) ** j * mpmath.exp(s * log)

    return mpmath.quad(integrand, path)


def draw(rng: random.Random, kind: str) -> tuple[Fraction, object, object]:
    """Return p^2, m1^2, m2^2 of a kind; where one line is special it is the first."""

    def number(low: int, high: int) -> Fraction:
        return Fraction(rng.randint(low * 20 + 1, high * 20), 20)

    m1: object = number(0, 5)
    m2: object = number(0, 5)
    p = number(-9, 20)
    a, b = number(0, 3), number(3, 5)
    match kind:
        case "complex":
            m1 = (m1, -number(0, 2))
        case "one_massless":
            m1 = Fraction(0)
        case "both_massless":
            m1 = m2 = Fraction(0)
        case "zero_momentum":
            p = Fraction(0)
        case "equal_at_zero":
            p, m2 = Fraction(0), m1
        case "massless_at_zero":
            p, m1 = Fraction(0), Fraction(0)
        case "threshold":
            p, m1, m2 = (a + b) ** 2, a * a, b * b
        case "pseudothreshold":
            p, m1, m2 = (a - b) ** 2, a * a, b * b
        case "on_shell":
            m1, p = Fraction(0), m2
    if p == 0 and kind in {"general", "complex", "one_massless", "both_massless"}:
        p = Fraction(7, 3)
    return p, m1, m2


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("seed", range(6))
def test_positive_powers_in_every_dimension(kind: str, seed: int) -> None:
    rng = random.Random(f"{kind}{seed}")
    n1, n2, dimension = rng.randint(1, 6), rng.randint(1, 6), rng.randint(1, 12)
    p, m1, m2 = draw(rng, kind)
    with mpmath.workdps(50):
        e = to_mp(EPSILON)
        s = mpmath.mpf(dimension) / 2 - e - n1 - n2
        value = feynman_integral(
            to_mp(p),
            mpmath.mpmathify(to_mp(m1)),
            mpmath.mpmathify(to_mp(m2)),
            n1 - 1,
            n2 - 1,
            s,
            kind,
        )
        expected = (
            (-1) ** (n1 + n2) * mpmath.exp(mpmath.euler * e) * mpmath.gamma(-s)
            * value / mpmath.gamma(n1) / mpmath.gamma(n2)
        )  # fmt: skip
        if seed % 2:
            m1, m2, n1, n2 = m2, m1, n2, n1
        series = loopint.bubble(
            p, m1, m2, (n1, n2), dimension=dimension, orders=(-3, 10), digits=45
        )
        assert series.status == "ok"
        assert abs(at_epsilon(series, e) / expected - 1) < mpmath.mpf(10) ** -36


@pytest.mark.parametrize("dimension", [2, 3, 4, 7])
@pytest.mark.parametrize("powers", [(1, -1), (2, -2), (3, -4), (1, -3), (2, 0), (-1, 2)])
def test_numerators_by_difference_relations(powers: tuple[int, int], dimension: int) -> None:
    """Integration by parts with a numerator (Chetyrkin, Tkachov 1981), N = 1, mu = 1, euclidean.

    d/dq . q gives (d - 2 n1 - n2) B + 2 m1^2 n1 B(n1+1)
    + n2 [m1^2 + m2^2 - p^2 - ((q^2 - m1^2) line)] B(n2+1) = 0 with D1 = m1^2 - q^2:
    (d - 2 n1 - n2) B(n1,n2) + 2 n1 m1^2 B(n1+1,n2) + n2 (m1^2+m2^2-p^2) B(n1,n2+1)
    - n2 B(n1-1,n2+1) = 0.
    """
    p, m1, m2 = Fraction(13, 7), Fraction(3, 2), Fraction(2, 5)
    n1, n2 = powers
    with mpmath.workdps(60):
        e = to_mp(EPSILON)

        def value(a: int, b: int) -> mpmath.mpf:
            series = loopint.bubble(
                p, m1, m2, (a, b), dimension=dimension, orders=(-1, 10), digits=45,
                propagator_sign="euclidean", measure="plain",
            )  # fmt: skip
            return at_epsilon(series, e)

        d = dimension - 2 * e
        terms = [
            (d - 2 * n1 - n2) * value(n1, n2),
            2 * n1 * to_mp(m1) * value(n1 + 1, n2),
            n2 * to_mp(m1 + m2 - p) * value(n1, n2 + 1) if n2 else mpmath.mpf(0),
            -n2 * value(n1 - 1, n2 + 1) if n2 else mpmath.mpf(0),
        ]
        size = max(abs(term) for term in terms)
        assert size > 0
        assert abs(mpmath.fsum(terms)) < size * mpmath.mpf(10) ** -36


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (1, 3), (4, 2)])
@pytest.mark.parametrize("dimension", [1, 3, 4, 6])
def test_integration_by_parts(kind: str, powers: tuple[int, int], dimension: int) -> None:
    """The same relation with positive powers, at every kind of point."""
    p, m1, m2 = draw(random.Random(f"{kind}{powers}{dimension}"), kind)
    n1, n2 = powers
    with mpmath.workdps(60):
        e = to_mp(EPSILON)
        a, b = mpmath.mpmathify(to_mp(m1)), mpmath.mpmathify(to_mp(m2))

        def value(i: int, j: int) -> mpmath.mpf:
            series = loopint.bubble(
                p, m1, m2, (i, j), dimension=dimension, orders=(-3, 10), digits=45,
                propagator_sign="euclidean",
            )  # fmt: skip
            assert series.status == "ok"
            return at_epsilon(series, e)

        d = dimension - 2 * e
        terms = [
            (d - 2 * n1 - n2) * value(n1, n2),
            2 * n1 * a * value(n1 + 1, n2) if a else mpmath.mpf(0),
            n2 * (a + b - to_mp(p)) * value(n1, n2 + 1),
            -n2 * value(n1 - 1, n2 + 1),
        ]
        size = max(abs(term) for term in terms)
        assert abs(mpmath.fsum(terms)) < size * mpmath.mpf(10) ** -34


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("powers", [(1, 1), (2, 1), (2, 3)])
def test_dimensional_recurrence(kind: str, powers: tuple[int, int]) -> None:
    """B^(d-2) = sum over lines of n_i B^(d)(n_i + 1), euclidean: Tarasov, hep-th/9606018, one loop.

    From the Feynman form: x + (1-x) = 1 under the integral.
    """
    p, m1, m2 = draw(random.Random(f"{kind}{powers}"), kind)
    n1, n2 = powers
    settings = {"orders": (-3, 3), "digits": 30, "propagator_sign": "euclidean"}
    for dimension in (3, 6):
        left = loopint.bubble(p, m1, m2, powers, dimension=dimension - 2, **settings)
        one = loopint.bubble(p, m1, m2, (n1 + 1, n2), dimension=dimension, **settings)
        two = loopint.bubble(p, m1, m2, (n1, n2 + 1), dimension=dimension, **settings)
        with mpmath.workdps(45):
            for k in left:
                right = n1 * one[k] + n2 * two[k]
                size = abs(one[k]) + abs(two[k]) + abs(left[k])
                assert abs(left[k] - right) <= size * mpmath.mpf(10) ** -28


def test_textbook_bubble_in_two_and_three_dimensions() -> None:
    """d = 3: Int d^3q/(8 pi^3) 1/((q^2+m^2)((q+k)^2+m^2)) = atan(k/2m)/(4 pi k), k^2 = -p^2.

    Rajantie, hep-ph/9606216, appendix (from memory); divided by pi^(3/2)/(8 pi^3) it is
    2 sqrt(pi) atan(k/2m)/k.  d = 2 at p = 0: Gamma(1) (m^2)^-1.
    """
    with mpmath.workdps(40):
        m, p = mpmath.mpf(3) / 2, mpmath.mpf(2)
        three = loopint.bubble(
            -4, "9/4", "9/4", dimension=3, orders=(0, 0), propagator_sign="euclidean"
        )[0]
        expected = mpmath.sqrt(mpmath.pi) * 2 * mpmath.atan(p / (2 * m)) / p
        assert abs(three - expected) < mpmath.mpf(10) ** -28
        two = loopint.bubble(0, "9/4", "9/4", dimension=2, orders=(0, 0))[0]
        assert abs(two - 1 / m**2) < mpmath.mpf(10) ** -28


def test_accidental_zero_of_an_ultraviolet_pole_is_exact() -> None:
    """d0 = 6: the pole is (m1^2 + m2^2)/2 - p^2/6, zero at p^2 = 3 (m1^2 + m2^2)."""
    series = loopint.bubble(9, 1, 2, dimension=6, orders=(-1, 1))
    assert series[-1] == 0
    assert series.bounds[-1] == 0
    assert series.status == "ok"


def test_both_powers_not_positive_is_exactly_zero() -> None:
    series = loopint.bubble(3, 1, 1, (-2, 0))
    assert series.method == "exact"
    assert all(series[k] == 0 for k in series)


def test_threshold_in_odd_dimensions_has_its_own_pole_and_says_so() -> None:
    at = loopint.bubble(4, 1, 1, dimension=3, orders=(-1, 0))
    assert at.region == "threshold_isolated"
    assert at[-1] != 0
    near = loopint.bubble("4.01", 1, 1, dimension=3, orders=(-1, 0))
    assert near[-1] == 0
    assert loopint.bubble(4, 1, 1, dimension=4).region == "threshold"
    assert loopint.bubble(2, 0, 2, (1, 2)).region == "on_shell_isolated"


@pytest.mark.parametrize("power", [2, 11, 26])
@pytest.mark.parametrize(
    ("centre", "m1", "m2"), [("1", "1", "4"), ("0", "1", "4"), ("0", "3", "3")]
)
def test_continuity_of_dotted_integrals_at_regular_points(
    power: int, centre: str, m1: str, m2: str
) -> None:
    """Pseudothreshold and zero momentum are regular points whatever the powers."""
    for sign in (1, -1):
        for dimension in (3, 4):
            at = loopint.bubble(centre, m1, m2, (3, 2), dimension=dimension)
            near = loopint.bubble(
                Fraction(centre) + sign * Fraction(1, 10**power),
                m1,
                m2,
                (3, 2),
                dimension=dimension,
            )
            with mpmath.workdps(40):
                for k in at:
                    assert abs(at[k] - near[k]) < 100 * mpmath.mpf(10) ** -power + 1e-27


SWEPT = [  # powers, d0, centre, m1^2, m2^2: continuous in dimensional regularisation
    ((2, 1), 4, "1", "1", "4"),
    ((2, 2), 6, "1", "1", "4"),
    ((1, 2), 3, "0", "1", "4"),
    ((2, 1), 4, "0", "3", "3"),
    ((1, -2), 4, "9", "1", "4"),
    ((2, 1), 6, "9", "1", "4"),
    ((1, 1), 5, "9", "1", "4"),
    ((1, 2), 8, "2", "0", "2"),
]
JUMPING = [  # nearby values grow without bound: the region says so
    ((2, 1), 4, "9", "1", "4"),
    ((1, 2), 3, "4", "1", "1"),
    ((1, 2), 4, "2", "0", "2"),
]


def approach(
    powers: tuple[int, int], dimension: int, centre: str, masses: tuple[str, str], side: int
) -> Iterator[tuple[int, loopint.LaurentSeries]]:
    """Go towards a degenerate point, from a tenth down to 10^-40 away."""
    for exponent in (1, 4, 10, 20, 30, 40):
        p_squared = Fraction(centre) + side * Fraction(1, 10**exponent)
        near = loopint.bubble(p_squared, *masses, powers, dimension=dimension, digits=30)
        assert near.status == "ok"
        yield exponent, near


@pytest.mark.parametrize("side", [1, -1])
@pytest.mark.parametrize(("powers", "dimension", "centre", "m1", "m2"), SWEPT)
def test_sweep_towards_a_degenerate_point_is_continuous(
    powers: tuple[int, int], dimension: int, centre: str, m1: str, m2: str, side: int
) -> None:
    at = loopint.bubble(centre, m1, m2, powers, dimension=dimension, digits=30)
    assert not at.region.endswith("_isolated")
    for exponent, near in approach(powers, dimension, centre, (m1, m2), side):
        with mpmath.workdps(40):
            for k in at:
                limit = 300 * mpmath.mpf(10) ** (-exponent / mpmath.mpf(2)) * (3 * exponent) ** 3
                size = 1 + abs(at[k])
                assert abs(near[k] - at[k]) < size * (limit + mpmath.mpf(10) ** -28), (exponent, k)


@pytest.mark.parametrize("side", [1, -1])
@pytest.mark.parametrize(("powers", "dimension", "centre", "m1", "m2"), JUMPING)
def test_sweep_towards_an_isolated_point_grows(
    powers: tuple[int, int], dimension: int, centre: str, m1: str, m2: str, side: int
) -> None:
    at = loopint.bubble(centre, m1, m2, powers, dimension=dimension, digits=30)
    assert at.region.endswith("_isolated")
    sizes = [abs(near[0]) for _, near in approach(powers, dimension, centre, (m1, m2), side)]
    assert all(b > a for a, b in itertools.pairwise(sizes[1:]))
    assert sizes[-1] > 20 * (1 + abs(at[0]))
