"""Doubles with proven bounds: every bound against ball arithmetic, every number from elsewhere."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from flint import acb, arb, arb_poly, fmpq
from hypothesis import given
from hypothesis import strategies as st

import loopint
from loopint import InputError, bubble_array, tadpole_array
from loopint.arrays import bubble as bubble_module
from loopint.arrays import gauss_rule
from loopint.arrays.end_tables import (
    FAR_COMPLEX,
    FAR_REAL,
    NEAR_COMPLEX,
    NEAR_REAL,
    end_tables,
)
from loopint.arrays.ends import LOG1P, complex_log1p
from loopint.arrays.evaluate import Tolerance
from loopint.arrays.points import complex_points, real_points
from loopint.arrays.rounding import (
    QUOTIENT,
    UNIT,
    as_complex,
    quotient,
    square_root,
    sum_of_three,
    two_product,
    two_sum,
)
from loopint.arrays.tables import COMPLEX_RADIUS, REAL_RADIUS, double_tables
from loopint.core.conventions import Conventions, Measure
from loopint.core.gamma_factors import EpsilonFactor
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.quadratic import quadratic_tables
from loopint.integrals.registry import Evaluator, Integral, evaluate
from tests.reference import bubble_by_quadrature

MASTERS = [
    ((1, 1), (), (-1, 0)),
    ((1, 1), (), (-1, 2)),
    ((2, 1), (), (0, 2)),
    ((1, 2), (), (-1, 1)),
    ((1, 1), "m1_squared", (0, 1)),
    ((1, 1), "m2_squared", (0, 0)),
    ((1, 1), "p_squared", (0, 2)),
]


def distance_low(ball: object, value: complex) -> float:
    """Return a lower bound on |true - value|."""
    with working_precision(256):
        return float(abs(acb(ball) - acb(value.real, value.imag)).lower())


def distance_up(ball: acb, value: complex) -> float:
    """Return an upper bound on |true - value|."""
    with working_precision(256):
        gap = acb(ball) - acb(value.real, value.imag)
        return 0.0 if gap == 0 else float(abs(gap).upper())


def assert_bounds_hold(result, integral, conventions, point) -> float:
    """Compare every point with balls; return the worst error relative to its bound."""
    worst = 0.0
    for i in range(result.fallback.size):
        series = evaluate(integral, point(i), conventions, digits=40).series
        for k in result.values:
            value, bound = complex(result.values[k].flat[i]), float(result.bounds[k].flat[i])
            if result.fallback.flat[i]:  # rounded from a ball: as sharp as the check itself
                assert distance_low(series[k], value) <= bound
                continue
            error = distance_up(series[k], value)
            assert error <= bound, (i, k, value, series[k], error, bound)
            if bound:
                worst = max(worst, error / bound)
    return worst


def check_bubble(p, m1, m2, powers=(1, 1), derivatives=(), orders=(-1, 2), **options):
    result = bubble_array(p, m1, m2, powers, orders=orders, derivatives=derivatives, **options)
    integral = Integral.parse("bubble", powers, options.get("dimension", 4), orders, derivatives)
    conventions = Conventions.parse(
        options.get("measure", "msbar"),
        options.get("propagator_sign", "minkowski"),
        options.get("mu_squared", 1),
    )
    p, m1, m2 = np.broadcast_arrays(p, m1, m2)

    def point(i: int) -> TwoPoint:
        return TwoPoint(exact_real(p.flat[i]), exact_complex(m1.flat[i]), exact_complex(m2.flat[i]))

    worst = assert_bounds_hold(result, integral, conventions, point)
    assert worst < 1
    return result


def decades(rng, low, high, count):
    return 10.0 ** rng.uniform(low, high, count)


def samples(kind: str, count: int, seed: int):
    rng = np.random.default_rng(seed)
    sign = rng.choice([-1.0, 1.0], count)
    if kind == "uniform":
        return rng.uniform(-50, 50, count), *rng.uniform(0.01, 10, (2, count))
    if kind == "logarithmic":
        return (sign * decades(rng, -3, 3, count), *(
            decades(rng, -3, 3, count) for _ in range(2)
        ))  # fmt: skip
    if kind == "hierarchical":
        return (sign * decades(rng, -30, 30, count), *(
            decades(rng, -30, 30, count) for _ in range(2)
        ))  # fmt: skip
    p, m1, m2 = samples("uniform" if kind == "unstable" else "hierarchical", count, seed + 1)
    width1, width2 = decades(rng, -8, 1, count), decades(rng, -8, 1, count)
    return p, m1 * (1 - 1j * width1), m2 * (1 - 1j * width2)


# --- the rounding model -----------------------------------------------------------------------


def structured(rng) -> np.ndarray:
    near_one = 1 + np.ldexp(rng.uniform(-1, 1, 3000), -rng.integers(0, 53, 3000))
    wide = np.ldexp(rng.uniform(0.5, 1, 3000), rng.integers(-900, 900, 3000))
    return np.concatenate([near_one[near_one > 0], wide, np.arange(1.0, 200.0)])


def exact_extended(x) -> arb:
    """Return an extended number as a ball; its leading 53 bits and the rest are doubles."""
    return arb(float(x)) + arb(float(x - np.longdouble(float(x))))


@pytest.mark.skipif(not bubble_module.EXTENDED, reason="no extended precision")
@pytest.mark.parametrize("name", ["log", "log1p", "arctan2"])
def test_extended_functions_are_within_four_ulp(name: str) -> None:
    rng = np.random.default_rng(5)
    x = structured(rng).astype(np.longdouble) * (1 + np.longdouble(2.0**-60))
    y = rng.permutation(x)
    y = np.where(np.abs(np.log2(x) - np.log2(y)) < 900, y, x)  # the quotient is a double
    values = getattr(np, name)(*((x, y) if name == "arctan2" else (x,)))
    assert float(np.finfo(np.longdouble).eps / 2) == bubble_module.EXTENDED_UNIT * UNIT
    with working_precision(160):
        for a, b, value in zip(x, y, values, strict=True):
            if name == "arctan2":
                exact = acb(exact_extended(b), exact_extended(a)).log().imag
            else:
                exact = getattr(exact_extended(a), name)()
            ulp = 2 * bubble_module.EXTENDED_UNIT * UNIT * abs(float(value))
            assert abs(exact_extended(value) - exact) <= 4 * ulp


@pytest.mark.skipif(not bubble_module.EXTENDED, reason="no extended precision")
@pytest.mark.parametrize("measure", ["msbar", "plain"])
@pytest.mark.parametrize("mu_squared", ["1", "7/3"])
def test_fifteen_digits_of_the_finite_part(measure: str, mu_squared: str) -> None:
    p, m1, m2 = samples("uniform", 3000, 4)
    integral = Integral.parse("bubble", (1, 1), 4, (-1, 0), ())
    conventions = Conventions.parse(measure, "minkowski", mu_squared)
    tolerance = Tolerance(9e-16, of_series=False)
    arrays = bubble_module.bubble_doubles(integral, conventions, (p, m1, m2), tolerance)
    assert arrays.missing[m1 > 0].mean() < 0.05
    evaluator = Evaluator(integral, conventions, digits=20)
    worst = 0.0
    for i in np.flatnonzero(~arrays.missing)[::5]:
        ball = evaluator(TwoPoint(exact_real(p[i]), exact_complex(m1[i]), exact_complex(m2[i])))
        value = complex(arrays.values[0][i])
        with working_precision(160):
            gap = abs(acb(ball.series[0]) - acb(value.real, value.imag))
            assert gap <= arrays.bounds[0][i]
            worst = max(worst, float(gap) / arrays.bounds[0][i])
    assert worst > 0.3


@pytest.mark.parametrize("name", ["log", "log1p", "arctan"])
def test_numpy_functions_are_within_four_ulp(name: str) -> None:
    x = structured(np.random.default_rng(5))
    values = getattr(np, name)(x)
    with working_precision(120):
        for argument, value in zip(x, values, strict=True):
            exact = arb(float(argument))
            exact = exact.atan() if name == "arctan" else getattr(exact, name)()
            assert abs(arb(float(value)) - exact) <= 4 * math.ulp(float(value))


def test_numpy_arctan2_is_within_four_ulp() -> None:
    rng = np.random.default_rng(6)
    x = structured(rng) * 1.0
    y = rng.permutation(x)
    y = np.where(np.abs(np.log2(x) - np.log2(y)) < 900, y, x) * rng.choice([-1, 1], x.size)
    x = x * rng.choice([-1, 1], x.size)
    values = np.arctan2(y, x)
    with working_precision(120):
        for a, b, value in zip(y, x, values, strict=True):
            exact = acb(float(b), float(a)).log().imag
            assert abs(arb(float(value)) - exact) <= 4 * math.ulp(float(value))


finite = st.floats(-1e100, 1e100, allow_subnormal=False).filter(lambda x: x == 0 or abs(x) > 1e-100)


@given(finite, finite, finite)
def test_transformations_are_error_free(a: float, b: float, c: float) -> None:
    x, y, z = (np.array([v]) for v in (a, b, c))
    total, lost = two_sum(x, y)
    assert Fraction(total[0]) + Fraction(lost[0]) == Fraction(a) + Fraction(b)
    product, lost = two_product(x, y)
    assert Fraction(product[0]) + Fraction(lost[0]) == Fraction(a) * Fraction(b)
    high, low = sum_of_three(x, y, z)
    error = Fraction(high[0]) + Fraction(low[0]) - sum(map(Fraction, (a, b, c)))
    assert abs(error) <= Fraction(2.1 * UNIT**2) * sum(abs(Fraction(v)) for v in (a, b, c))


def test_complex_operations_stay_within_their_bounds() -> None:
    rng = np.random.default_rng(7)
    count = 2000
    x, y = (
        as_complex(*(rng.normal(size=(2, count)) * 10.0 ** rng.integers(-9, 9, (2, count))))
        for _ in range(2)
    )
    ratio, root = quotient(x, y), square_root(x)
    with working_precision(200):
        for a, b, q, r in zip(x, y, ratio, root, strict=True):
            exact_a, exact_b = acb(a.real, a.imag), acb(b.real, b.imag)
            for value, exact, units in ((q, exact_a / exact_b, QUOTIENT), (r, exact_a.sqrt(), 3.5)):
                assert abs(acb(value.real, value.imag) - exact) <= units * UNIT * abs(exact)


def test_kallen_function_survives_its_cancellation() -> None:
    rng = np.random.default_rng(8)
    m1, m2 = rng.uniform(0.1, 10, (2, 3000))
    sign = rng.choice([-1, 1], 3000)
    p = (np.sqrt(m1) + sign * np.sqrt(m2)) ** 2
    for step in range(3):
        p = np.nextafter(p, np.inf) if step else p
        points = real_points(p, m1, m2, 0 * p, 0 * p)
        lost = 0.0
        for x, y, z, value, error in zip(
            p, m1, m2, points.kallen, points.kallen_error, strict=True
        ):
            a, b, c = map(Fraction, (x, y, z))
            exact = (a - b - c) ** 2 - 4 * b * c
            if math.isfinite(error):
                assert abs(Fraction(value) - exact) <= Fraction(error * UNIT) * abs(exact)
            else:
                lost += 1
        assert lost < 30  # lambda known although plain doubles have no digit of it


def test_kallen_function_of_complex_masses() -> None:
    rng = np.random.default_rng(9)
    p, m1, m2 = samples("unstable", 1500, 10)
    p[:700] = ((np.sqrt(m1) + np.sqrt(m2)) ** 2).real[:700]
    m1[:700], m2[:700] = m1[:700].real * (1 - 1e-12j), m2[:700].real * (1 - 1e-13j)
    p *= rng.choice([1, 1 + 1e-15], 1500)
    points = complex_points(p, m1, m2, 0 * p, 0 * p)
    assert np.isfinite(points.kallen_error).mean() > 0.99
    with working_precision(300):
        for i in range(p.size):
            x, y, z = acb(p[i]), acb(m1[i].real, m1[i].imag), acb(m2[i].real, m2[i].imag)
            exact = (x - y - z) ** 2 - 4 * y * z
            value = acb(points.kallen[i].real, points.kallen[i].imag)
            if np.isfinite(points.kallen_error[i]):
                error = float(points.kallen_error[i])
                assert abs(value - exact) <= error * UNIT * abs(exact)


# --- polynomials and the Gauss rule -----------------------------------------------------------


@pytest.mark.parametrize("real", [True, False])
@pytest.mark.parametrize("part", ["far", "near"])
def test_polynomials_against_the_tables_of_balls(part: str, real: bool) -> None:
    rng = np.random.default_rng(11)
    exact = getattr(quadratic_tables(fmpq(0), EpsilonFactor(), 3, 160), part)
    if real:
        u = rng.uniform(-REAL_RADIUS, REAL_RADIUS, 300)
    else:
        u = COMPLEX_RADIUS * np.sqrt(rng.uniform(0, 0.999, 300)) * np.exp(
            1j * rng.uniform(0, 7, 300)
        )  # fmt: skip
    found = getattr(double_tables(3, real), part).polynomials
    values = [polynomial(u) for polynomial in found]
    worst = 0.0
    for i, argument in enumerate(u):
        ball = arb(argument) if real else acb(argument.real, argument.imag)
        with working_precision(160):
            series = exact.evaluate(ball)
        for k in range(4):
            bound = UNIT * found[k].error
            error = distance_up(series[k], complex(values[k][i]))
            assert error <= bound
            worst = max(worst, error / bound)
    assert worst > 0.02  # the bound is not vacuous


def exact_end_rows(part: str) -> list[arb_poly]:
    """Coefficients of h(u), or of exp(-chi) g(2 chi) as a polynomial in chi, in balls."""
    tables = quadratic_tables(fmpq(0), EpsilonFactor(), 3, 420)
    with working_precision(500):
        if part == "far":
            return [arb_poly(c) for c, _ in tables.far.shortest(arb(1.75), arb(0))]
        half, rows = arb_poly([0, -arb(0.5)]), []
        exponential = sum(
            (half**n * (1 / arb(math.factorial(n))) for n in range(1, 120)), start=arb_poly([1])
        )
        for c, _ in tables.near.shortest(arb(3.5), arb(0)):
            rows.append((arb_poly(c) * exponential)(arb_poly([0, 2])))
        return rows


@pytest.mark.parametrize("real", [True, False])
@pytest.mark.parametrize("part", ["far", "near"])
def test_end_tables_and_their_slopes(part: str, real: bool) -> None:
    """Against the series they are cut from; `gamma` makes the prefactor 1."""
    rng = np.random.default_rng(12)
    tables = end_tables(Measure.GAMMA, 3, real)
    found, slopes = getattr(tables, part), getattr(tables, f"{part}_slope")
    if real:
        low, high = FAR_REAL if part == "far" else NEAR_REAL
        x = np.concatenate([rng.uniform(low, high, 200), [low, high]])
    else:
        radius = FAR_COMPLEX if part == "far" else NEAR_COMPLEX
        x = radius * np.sqrt(rng.uniform(0, 1, 200)) * np.exp(1j * rng.uniform(0, 7, 200))
    values, slope_values, worst = found(x), slopes(x), 0.0
    rows = exact_end_rows(part)
    for i, argument in enumerate(x):
        with working_precision(500):
            ball = acb(argument.real, argument.imag)
            at = ball if part == "far" else ball.sqrt()
            for k, row in enumerate(rows):
                slope = row.derivative()(at) / (1 if part == "far" else 2 * at)
                for table, value, exact in (
                    (found, values, row(at)), (slopes, slope_values, slope),
                ):  # fmt: skip
                    bound = UNIT * table.error * table.sizes[k]
                    error = distance_up(acb(exact), complex(value[k][i]))
                    assert error <= bound + 1e-60
                    assert abs(complex(value[k][i])) <= 1.000001 * table.sizes[k] + 1e-60
                    worst = max(worst, error / bound if bound > 1e-60 else 0.0)
    assert worst > 0.02  # the bound is not vacuous


def test_end_tables_at_threshold() -> None:
    """N = 1/(1-2 eps) where lambda = 0, and B = -2 S cos(pi eps): nothing is left of T there."""
    tables = end_tables(Measure.GAMMA, 3, True)
    assert tables.near(np.zeros(1))[:, 0] == pytest.approx([1, 2, 4, 8], rel=1e-14)
    assert tables.root[1, 1, 1].values == (0, 0, 0, 0)
    # -B tan(pi eps) = i (B + 2 S exp(-i pi eps)) = -pi eps (1 + 2 eps + ...)
    first, second = tables.root[1, 0, 2].values[1:3]
    assert (1j * first, 1j * second) == pytest.approx((-math.pi, -2 * math.pi), rel=1e-15)


def test_complex_log1p() -> None:
    rng = np.random.default_rng(13)
    w = 1 - decades(rng, -17, 0, 3000) * np.exp(1j * rng.uniform(-1.6, 1.6, 3000))
    x = (1 / w - 1)[(np.abs(w) <= 1) & (w.real >= 0.25)]
    values = complex_log1p(x)
    with working_precision(200):
        for argument, value in zip(x, values, strict=True):
            exact = acb(argument.real, argument.imag).log1p()
            error = abs(acb(value.real, value.imag) - exact)
            assert error <= LOG1P * UNIT * abs(exact)


def test_gauss_rule_integrates_polynomials_exactly() -> None:
    count = gauss_rule.FAR.nodes
    nodes = gauss_rule.rule(count)
    assert math.fsum(n.weight for n in nodes) == pytest.approx(1, abs=1e-15)
    for degree in (1, 7, 2 * count - 1):
        total = math.fsum(n.weight * n.x**degree for n in nodes)
        assert total == pytest.approx(1 / (degree + 1), abs=1e-15)
    beyond = 2 * count  # leading error of the rule: 4^-2n scale
    total = math.fsum(n.weight * (2 * n.x - 1) ** beyond for n in nodes)
    assert abs(total - 1 / (beyond + 1)) > 1e-8


# --- bounds against balls ---------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["uniform", "logarithmic", "hierarchical", "unstable", "both"])
@pytest.mark.parametrize(("powers", "derivatives", "orders"), MASTERS)
def test_bounds_hold_at_random_points(kind, powers, derivatives, orders) -> None:
    check_bubble(*samples(kind, 25, 20), powers, derivatives, orders)


@pytest.mark.parametrize("kind", ["uniform", "logarithmic", "unstable"])
@pytest.mark.parametrize(("powers", "derivatives", "orders"), MASTERS[1:3] + MASTERS[6:])
@pytest.mark.parametrize("left_out", ["_fill_by_ends", "expand_plain"])
def test_every_stage_has_valid_bounds(
    kind, powers, derivatives, orders, left_out, monkeypatch
) -> None:
    """What serves the points that an earlier stage leaves, at all points."""
    if left_out == "_fill_by_ends":
        monkeypatch.setattr(bubble_module, left_out, lambda *arguments: arguments[2])
    else:
        monkeypatch.setattr(bubble_module, left_out, lambda *_: iter(()))
    check_bubble(*samples(kind, 20, 24), powers, derivatives, orders)


def test_small_momentum_and_nearly_equal_masses() -> None:
    """Where lambda is lost to rounding, also its sign, although p^2 < 0."""
    rng = np.random.default_rng(23)
    m = decades(rng, -2, 2, 60)
    p = rng.choice([-1, 1], 60) * decades(rng, -40, 0, 60)
    other = m * (1 + rng.choice([-1, 1], 60) * decades(rng, -17, -6, 60))
    for orders in ((-1, 0), (-1, 1)):
        assert not check_bubble(p, m, other, orders=orders).fallback.any()


def test_near_the_mass_shell_with_a_light_line() -> None:
    """There lambda is small because S is, and known all the better."""
    rng = np.random.default_rng(25)
    m = decades(rng, -2, 2, 60)
    p = m * (1 + rng.choice([-1, 1], 60) * decades(rng, -15, -2, 60))
    light = m * decades(rng, -30, -9, 60)
    for orders in ((-1, 0), (-1, 2)):
        assert not check_bubble(p, m, 0.0, orders=orders).fallback.any()
    for powers, derivatives, orders in MASTERS[1:]:
        result = check_bubble(p, light, m, powers, derivatives, orders)
        assert not result.fallback.any()


def test_slope_at_small_momentum() -> None:
    """Where masses differ, dB/dp^2 is not left to balls although p^2 M cancels."""
    rng = np.random.default_rng(21)
    m1, m2 = decades(rng, -4, 0, 60), decades(rng, 1, 3, 60)
    p = rng.choice([-1, 0, 1], 60) * decades(rng, -20, 0, 60)
    for a, b in ((m1, m2), (m2, m1 * (1 - 0.1j)), (m2 * (1 - 1e-3j), m1)):
        result = check_bubble(p, a, b, derivatives="p_squared", orders=(0, 2))
        assert result.fallback.mean() < 0.05


@pytest.mark.parametrize(("powers", "derivatives", "orders"), MASTERS[2:])
def test_most_points_of_other_integrals_are_vectorised(powers, derivatives, orders) -> None:
    for kind in ("uniform", "logarithmic", "hierarchical", "unstable", "both"):
        points = samples(kind, 3000, 22)
        options = {"orders": orders, "derivatives": derivatives}
        assert bubble_array(*points, powers, **options).fallback.mean() < 0.001


def neighbours(x: np.ndarray) -> list[np.ndarray]:
    up, down = np.nextafter(x, np.inf), np.nextafter(x, -np.inf)
    return [x, up, down, x * (1 + 1e-12), x * (1 - 1e-9), x * (1 + 1e-5), x * (1 - 1e-3)]


def adversarial() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Special points, their neighbours, extreme ratios, subnormal and huge p^2."""
    pairs = np.array([[1, 1], [0.3, 0.3], [2, 9], [0.25, 1e-3], [7, 1e-20], [1e-12, 1e5]])
    rows = []
    for m1, m2 in pairs:
        special = np.array(
            [(m1**0.5 + m2**0.5) ** 2, (m1**0.5 - m2**0.5) ** 2, m1, m1 + m2, m2 - m1, m1 - m2]
        )
        extreme = [0.0, -0.0, 5e-324, -1e-310, 1e-40, -1e-20, 1e-9, -1e-4, 1e30, -1e80, 1.7e308]
        p = np.concatenate([*neighbours(special), extreme])
        rows.append(np.stack([p, np.full_like(p, m1), np.full_like(p, m2)]))
    p, m1, m2 = np.concatenate(rows, axis=1)
    return p, m1, m2


@pytest.mark.parametrize("orders", [(-1, 0), (-1, 2)])
def test_bounds_hold_at_adversarial_points(orders: tuple[int, int]) -> None:
    result = check_bubble(*adversarial(), orders=orders)
    assert result.fallback.mean() < 0.3


@pytest.mark.parametrize("line", [0, 1, 2])
def test_bounds_hold_with_massless_lines(line: int) -> None:
    p, m1, m2 = (x[::3] for x in adversarial())
    m1 = m1 * 0 if line != 1 else m1
    m2 = m2 * 0 if line != 0 else m2
    result = check_bubble(p, m1, m2, orders=(-1, 1))
    check_bubble(p, m1, m2, orders=(-1, 0))
    assert result.fallback.mean() < 0.5


@pytest.mark.parametrize("width", [1e-300, 1e-16, 1e-8, 1.0, 1e3])
def test_bounds_hold_for_unstable_particles_near_threshold(width: float) -> None:
    p, m1, m2 = (x[::4] for x in adversarial())
    check_bubble(p, m1 * complex(1, -width), m2, orders=(-1, 1))


@pytest.mark.parametrize(("powers", "derivatives", "orders"), MASTERS[2:])
def test_bounds_of_other_integrals_hold_at_adversarial_points(powers, derivatives, orders) -> None:
    p, m1, m2 = adversarial()
    moderate = (np.abs(p) > 1e-12) & (np.abs(p) < 1e12) & (m1 > 1e-6)
    check_bubble(*(x[moderate][::7] for x in (p, m1, m2)), powers, derivatives, orders)


def test_subnormal_and_huge_masses() -> None:
    p = np.array([5e-324, -1e-310, 1e-300, 1e300, -1.7e308, 1e-290, 3e-290])
    m1 = np.array([5e-324, 1e-310, 3e-300, 1e299, 1e308, 1e-290, 1e-291])
    m2 = np.array([1e-323, 1e-312, 1e-300, 1e300, 5e307, 2e-290, 1e-291])
    for orders in ((-1, 0), (-1, 1)):
        result = check_bubble(p, m1, m2, orders=orders)
        assert not result.fallback[-2:].any()  # scaled by a power of two


@pytest.mark.parametrize("kind", ["logarithmic", "unstable"])
@pytest.mark.parametrize(("powers", "derivatives", "orders"), MASTERS[:3])
def test_a_point_does_not_depend_on_its_neighbours(kind, powers, derivatives, orders) -> None:
    """Values and bounds are the same bits wherever a table is cut."""
    rng = np.random.default_rng(60)
    p, m1, m2 = samples(kind, 700, 61)
    if kind == "unstable":
        m1, m2 = (np.where(rng.random(700) < 0.3, m.real, m) for m in (m1, m2))
    options = {"orders": orders, "derivatives": derivatives, "on_invalid": "nan"}
    whole = bubble_array(p, m1, m2, powers, **options)
    order = rng.permutation(700)
    for piece in np.array_split(order, 23):
        part = bubble_array(p[piece], m1[piece], m2[piece], powers, **options)
        for k in whole.values:
            assert (part[k] == whole[k][piece]).all()
            assert (part.bounds[k] == whole.bounds[k][piece]).all()


@pytest.mark.campaign
@pytest.mark.parametrize("kind", ["uniform", "logarithmic", "hierarchical", "unstable", "both"])
def test_campaign(kind: str) -> None:
    for seed in range(4):
        for powers, derivatives, orders in MASTERS:
            check_bubble(*samples(kind, 100, 1000 + 2 * seed), powers, derivatives, orders)


# --- values from elsewhere --------------------------------------------------------------------


def test_against_double_exponential_quadrature() -> None:
    """An independent integration of the Feynman-parameter form (tests.reference)."""
    points = [(5.0, 1.0, 1.5), (-3.0, 0.25, 2.0), (1.0, 1.0, 1.0), (9.5, 2.0, 2.5)]
    p, m1, m2 = np.array(points).T
    result = bubble_array(p, m1, m2, orders=(-1, 2))
    for i, point in enumerate(points):
        expected = bubble_by_quadrature(*map(Fraction, point), 2, 20)
        for k in range(-1, 3):
            assert abs(complex(expected[k]) - result[k][i]) <= result.bounds[k][i] + 1e-15


def test_finite_part_at_threshold_is_two_minus_logarithm() -> None:
    """B0(4m^2; m, m) = 1/eps + 2 - log(m^2/mu^2): textbook (Peskin-Schroeder 6.3 integrals)."""
    m = np.array([0.5, 1.0, 3.0])
    result = bubble_array(4 * m, m, m)
    assert np.all(np.abs(result[0] - (2 - np.log(m))) <= result.bounds[0] + 4e-16)


def test_imaginary_part_is_unitarity() -> None:
    """Im B0 = pi sqrt(lambda)/p^2 above threshold (Cutkosky), exactly 0 below."""
    p = np.array([4.5, 10.0, 1e4])
    result = bubble_array(p, 1.0, 1.0)
    assert result[0].imag == pytest.approx(np.pi * np.sqrt(1 - 4 / p), rel=1e-13)
    below = bubble_array(np.linspace(-10, 3.99, 500), 1.0, 1.0, orders=(-1, 2))
    assert all((below[k].imag == 0).all() for k in range(-1, 3))


# --- conventions, the ball path, exactness ----------------------------------------------------


@pytest.mark.parametrize("measure", ["msbar", "plain", "gamma", "r_gamma", "two_pi"])
@pytest.mark.parametrize("sign", ["minkowski", "euclidean"])
def test_conventions(measure: str, sign: str) -> None:
    p, m1, m2 = samples("uniform", 8, 30)
    for powers, derivatives, orders in MASTERS:
        check_bubble(
            p, m1, m2, powers, derivatives, orders,
            measure=measure, propagator_sign=sign, mu_squared="2.7",
        )  # fmt: skip


@pytest.mark.parametrize("mu_squared", [1e-200, "1/3", 1e250])
def test_renormalisation_scales(mu_squared: object) -> None:
    check_bubble(*samples("logarithmic", 15, 31), orders=(-1, 2), mu_squared=mu_squared)
    check_bubble(*samples("logarithmic", 15, 31), orders=(-1, 0), mu_squared=mu_squared)


@pytest.mark.parametrize(
    ("powers", "dimension", "orders", "derivatives"),
    [((3, 2), 4, (0, 1), ()), ((1, 1), 3, (0, 0), ()), ((1, 1), 4, (0, 4), ()),
     ((2, 1), 4, (0, 0), "p_squared"), ((1, 0), 4, (-1, 0), ())],
)  # fmt: skip
def test_other_integrals_take_the_ball_path(powers, dimension, orders, derivatives) -> None:
    result = check_bubble(
        *samples("uniform", 4, 32), powers, derivatives, orders, dimension=dimension
    )
    assert result.fallback.all()


def test_exact_zeros() -> None:
    result = bubble_array([0.0, 1.0], [0.0, 1.0], [0.0, 1.0], orders=(-3, 0))
    for k in (-3, -2):
        assert (result[k] == 0).all()
        assert (result.bounds[k] == 0).all()
    assert result[-1].tolist() == [0, 1]
    assert result.bounds[-1].tolist() == [0, 0]
    assert (result[0][0], result.bounds[0][0]) == (0, 0)
    nothing = bubble_array([3.0], 1.0, 1.0, orders=(-5, -3))
    assert (nothing[-4][0], nothing.bounds[-4][0], nothing.fallback[0]) == (0, 0, False)


@pytest.mark.parametrize("kind", ["uniform", "logarithmic", "hierarchical", "unstable"])
def test_few_points_need_the_ball_path(kind: str) -> None:
    points = samples(kind, 4000, 40)
    for orders in ((-1, 0), (-1, 2)):
        assert bubble_array(*points, orders=orders).fallback.mean() < 0.002


def test_tolerance_decides_about_the_ball_path() -> None:
    points = samples("uniform", 60, 41)
    loose, tight = bubble_array(*points), bubble_array(*points, rel_tolerance=2.0**-52)
    assert not loose.fallback.any()
    assert (tight.bounds[0] <= 2.0**-52 * np.maximum(1, np.abs(tight[0]))).all()
    assert (tight.bounds[0] < loose.bounds[0]).all()
    for value, bound, point in zip(
        tight[0], tight.bounds[0], zip(*points, strict=True), strict=True
    ):
        true = loopint.bubble(*map(float, point), orders=(0, 0), digits=25)[0]
        assert abs(complex(true - value)) <= bound
    for k in (-1, 0):
        assert (np.abs(loose[k] - tight[k]) <= loose.bounds[k] + tight.bounds[k]).all()
    strict = bubble_array(*points, relative_to="coefficient")
    assert (strict.bounds[0] <= 1e-12 * np.abs(strict[0])).all()


def test_a_coefficient_that_passes_through_zero() -> None:
    """The finite part at p^2 = 0 is -log m^2; near m^2 = 1 it vanishes."""
    m = 1 + np.array([1e-3, 1e-9, 1e-15])
    assert not bubble_array(0.0, m, m).fallback.any()
    strict = check_bubble(0.0, m, m, orders=(-1, 0), relative_to="coefficient")
    assert strict.fallback.all()


# --- tadpole ----------------------------------------------------------------------------------


@pytest.mark.parametrize("power", [-1, 1, 2, 3, 7])
@pytest.mark.parametrize("dimension", [2, 3, 4, 11])
@pytest.mark.parametrize("derivatives", [(), "m_squared", ("m_squared", "m_squared")])
def test_tadpole_bounds(power: int, dimension: int, derivatives) -> None:
    rng = np.random.default_rng(50)
    m = np.concatenate([decades(rng, -20, 20, 6), [0.0, 1.0, 1e-300]]).astype(complex)
    m[:3] *= 1 - 0.3j
    for options in ({}, {"propagator_sign": "euclidean", "measure": "two_pi", "mu_squared": 7}):
        integral = Integral.parse("tadpole", power, dimension, (-1, 2), derivatives)
        conventions = Conventions.parse(
            options.get("measure", "msbar"),
            options.get("propagator_sign", "minkowski"),
            options.get("mu_squared", 1),
        )
        for masses in (m, m.real.copy()):
            result = tadpole_array(
                masses, power, dimension=dimension, orders=(-1, 2), derivatives=derivatives,
                **options,
            )  # fmt: skip
            assert not result.fallback[:-1].any()
            finite = np.isfinite(result.bounds[0]) & np.isfinite(result.bounds[2])
            index = np.flatnonzero(finite)
            for i in index:
                series = evaluate(
                    integral, OnePoint(exact_complex(masses[i])), conventions, digits=40
                ).series
                for k in range(-1, 3):
                    assert distance_up(series[k], complex(result[k][i])) <= result.bounds[k][i]


def test_tadpole_of_a_textbook() -> None:
    """A0(m) = m^2 (1/eps + 1 - log m^2/mu^2), 't Hooft and Veltman 1979."""
    m = np.array([0.0, 0.5, 4.0])
    result = tadpole_array(m, mu_squared=2)
    assert result[-1].real == pytest.approx(m, rel=1e-15)
    assert result[0].real[1:] == pytest.approx(m[1:] * (1 - np.log(m[1:] / 2)), rel=1e-14)
    assert (result[0][0], result.bounds[0][0]) == (0, 0)


# --- input ------------------------------------------------------------------------------------


def test_shapes_are_broadcast_and_points_keep_their_places() -> None:
    p = np.array([[-1.0], [0.0], [5.0]])
    m1 = np.array([1.0, 2.0])
    result = bubble_array(p, m1, 1.0)
    assert result.shape == (3, 2)
    for i in range(3):
        for j in range(2):
            assert result[0][i, j] == bubble_array(p[i, 0], m1[j], 1.0)[0]
    assert bubble_array([], [], []).shape == (0,)
    assert bubble_array(1, 2, 3).shape == ()
    assert "fallback=0" in repr(result)
    assert result.status == "ok"


def test_number_types_keep_their_values() -> None:
    single = np.float32(0.1)
    assert bubble_array(single, 1, 1)[0] == bubble_array(float(single), 1.0, 1.0)[0]
    assert bubble_array(3, 1 + 0j, 1)[0] == bubble_array(3.0, 1.0, 1.0)[0]
    big = bubble_array(np.arange(5), np.ones(5, dtype=np.uint8), 1.0)
    assert big.status == "ok"


@pytest.mark.parametrize(
    ("arguments", "options", "words"),
    [
        (([1.0, np.nan], 1.0, 1.0), {}, ["p_squared = nan", "index [1]"]),
        ((1.0, [1.0, -2.0], 1.0), {}, ["m1_squared = -2.0", "index [1]", ">= 0"]),
        ((1.0, 1.0, [[1.0], [np.inf]]), {}, ["m2_squared = inf", "index [1, 0]"]),
        ((1.0, 1.0, 1 + 1j), {}, ["m2_squared = (1+1j)", "Im <= 0"]),
        ((1.0, "a", 1.0), {}, ["m1_squared has dtype"]),
        ((1j, 1.0, 1.0), {}, ["p_squared has dtype complex128"]),
        ((2**60 + 1, 1.0, 1.0), {}, ["p_squared has integers beyond 2^53"]),
        ((2**53 + 1, 1.0, 1.0), {}, ["p_squared has integers beyond 2^53"]),
        (([1.0, 2.0], [1.0, 2.0, 3.0], 1.0), {}, ["p_squared (2,)", "m1_squared (3,)"]),
        ((1.0, 1.0, 1.0), {"on_invalid": "skip"}, ["on_invalid = 'skip'", "raise, nan"]),
        ((1.0, 1.0, 1.0), {"relative_to": "x"}, ["relative_to = 'x'", "series, coefficient"]),
        ((1.0, 1.0, 1.0), {"rel_tolerance": 0}, ["rel_tolerance = 0"]),
        ((1.0, 1.0, 1.0), {"mu_squared": 0}, ["mu_squared = 0"]),
        ((1.0, 1.0, 1.0), {"orders": (1, 0)}, ["upside down"]),
    ],
)
def test_bad_input_is_named(arguments, options, words) -> None:
    with pytest.raises(InputError) as caught:
        bubble_array(*arguments, **options)
    for word in words:
        assert word in str(caught.value)


def test_invalid_points_can_become_nan() -> None:
    result = bubble_array([1.0, np.nan, 5.0], [1.0, 1.0, -1.0], 1.0, on_invalid="nan")
    assert result.invalid.tolist() == [False, True, True]
    assert np.isnan(result[0][1:]).all()
    assert np.isnan(result.bounds[0][1:]).all()
    assert result[0][0] == bubble_array(1.0, 1.0, 1.0)[0]
    assert result.bounds[0][0] == bubble_array(1.0, 1.0, 1.0).bounds[0]
    assert result.status == "invalid_points"
    assert tadpole_array([-1.0, 1.0], on_invalid="nan").invalid.tolist() == [True, False]


def test_public_names() -> None:
    assert loopint.bubble_array is bubble_array
    assert isinstance(tadpole_array(1.0), loopint.ArrayResult)
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = loopint.nothing
