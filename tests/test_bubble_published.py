"""The bubble and the tadpole against published formulas and relations.

Formulas are quoted from the literature named beside them; where a formula was written down from
memory the test says so.
"""

from __future__ import annotations

from fractions import Fraction

import mpmath
import pytest

import loopint
from tests.reference import at_epsilon, bubble_by_quadrature

DIGITS = 40
TINY = mpmath.mpf(10) ** -36
SAMPLES = [  # p^2, m1^2, m2^2: every real-mass region
    ("-3.7", "0.9", "0.4"),
    ("0.01", "0.9", "0.4"),
    ("0.9", "0.9", "0.4"),
    ("2.4", "0.9", "0.4"),
    ("7.25", "0.9", "0.4"),
    ("1000", "0.9", "0.4"),
]


def test_tadpole_finite_part() -> None:
    """A0(m) = m^2 (Delta - log(m^2/mu^2) + 1): Denner, arXiv:0709.1075, eq. (4.21)."""
    with mpmath.workdps(50):
        m = mpmath.mpf("2.3")
        series = loopint.tadpole("2.3", orders=(-1, 0), digits=DIGITS, mu_squared="0.7")
        assert abs(series[-1] - m) < TINY
        assert abs(series[0] - m * (1 - mpmath.log(m / mpmath.mpf("0.7")))) < TINY


@pytest.mark.parametrize("power", [1, 2, 3, 5])
@pytest.mark.parametrize("dimension", [1, 2, 3, 4, 5, 6, 12])
def test_tadpole_is_the_gamma_function(power: int, dimension: int) -> None:
    """(-1)^n Gamma(n-d/2)/Gamma(n) (m^2)^(d/2-n): Smirnov, Evaluating Feynman Integrals, A.1.

    mpmath.gamma at eps = 1e-6 against the summed series.
    """
    with mpmath.workdps(80):
        e = mpmath.mpf(10) ** -6
        m = mpmath.mpc("1.5", "-0.25")
        series = loopint.tadpole(
            ("1.5", "-0.25"), power, dimension=dimension, orders=(-2, 8), digits=70
        )
        half = mpmath.mpf(dimension) / 2 - e
        expected = (
            (-1) ** power
            * mpmath.exp(mpmath.euler * e)
            * mpmath.gamma(power - half)
            / mpmath.gamma(power)
            * m ** (half - power)
        )
        assert abs(at_epsilon(series, e) / expected - 1) < mpmath.mpf(10) ** -45


def test_tadpoles_that_vanish() -> None:
    """Scaleless and polynomial integrals are zero (common practice, no source)."""
    assert loopint.tadpole(0)[-1] == 0
    assert loopint.tadpole(3, -2)[0] == 0
    assert loopint.tadpole(3, 0).bounds[1] == 0


def denner_b0(p: mpmath.mpf, m0sq: mpmath.mpf, m1sq: mpmath.mpf) -> mpmath.mpc:
    """Return the finite part of B0, Denner arXiv:0709.1075 eq. (4.23), from memory."""
    m0, m1 = mpmath.sqrt(m0sq), mpmath.sqrt(m1sq)
    half = (m0sq + m1sq - p) / (2 * m0 * m1)
    root = mpmath.sqrt(mpmath.mpc(half**2 - 1))
    # x^2 + 2 half x + 1 = (x + r)(x + 1/r) with p^2 + i0, i.e. half - i0
    r = half + root
    log_r = mpmath.log(r)
    if half < -1:  # above threshold: r < 0 and log r follows half - i0
        shifted = half - mpmath.mpc(0, mpmath.mpf(10) ** -40)
        r_shifted = shifted + mpmath.sqrt(shifted**2 - 1)
        log_r = mpmath.log(abs(r)) + mpmath.mpc(0, mpmath.sign(mpmath.im(r_shifted)) * mpmath.pi)
        log_r = log_r if mpmath.re(r_shifted) * r.real > 0 else -log_r
        r = r if mpmath.re(r_shifted) * r.real > 0 else 1 / r
    return (
        2
        - mpmath.log(m0 * m1)
        + (m0sq - m1sq) / p * mpmath.log(m1 / m0)
        - m0 * m1 / p * (1 / r - r) * log_r
    )


@pytest.mark.parametrize(("p", "m1", "m2"), SAMPLES)
def test_two_point_function_of_denner(p: str, m1: str, m2: str) -> None:
    with mpmath.workdps(60):
        expected = denner_b0(mpmath.mpf(p), mpmath.mpf(m1), mpmath.mpf(m2))
        found = loopint.bubble(p, m1, m2, orders=(-1, 0), digits=DIGITS)
        assert found[-1] == 1
        assert abs(found[0] - expected) < TINY


@pytest.mark.parametrize(("p", "m1", "m2"), SAMPLES)
def test_two_point_function_by_roots(p: str, m1: str, m2: str) -> None:
    """'t Hooft, Veltman, Nucl. Phys. B153 (1979) 365: logarithms of the roots of Q, from memory.

    -Int log Q = -log(p^2) + sum over roots of [1 - log(1-x) + x log((x-1)/x)], for p^2 > 0 with
    roots displaced by p^2 + i0.
    """
    if mpmath.mpf(p) < 0:
        return
    with mpmath.workdps(60):
        q, a, b = mpmath.mpf(p), mpmath.mpf(m1), mpmath.mpf(m2)
        tiny = mpmath.mpc(0, mpmath.mpf(10) ** -50)
        root = mpmath.sqrt(mpmath.mpc((a - b - q) ** 2 - 4 * q * (b - tiny)))
        total = -mpmath.log(q)
        for sign in (1, -1):
            x = (q - a + b + sign * root) / (2 * q)
            # x = x_root on one side of the axis: principal logarithms add up to log Q
            total += 1 - mpmath.log(1 - x) + x * mpmath.log((x - 1) / x)
        found = loopint.bubble(p, m1, m2, orders=(0, 0), digits=DIGITS)[0]
        assert abs(mpmath.re(total) - found.real) < mpmath.mpf(10) ** -35


@pytest.mark.parametrize("s", ["-5", "-0.001", "4", "12.5"])
def test_equal_mass_loop_function_of_chiral_perturbation_theory(s: str) -> None:
    """16 pi^2 Jbar(s) = 2 + sigma log((sigma-1)/(sigma+1)), 2 at threshold.

    Gasser, Leutwyler, Ann. Phys. 158 (1984) 142, appendix; Jbar(s) = B(s) - B(0).
    """
    with mpmath.workdps(60):
        at_zero = loopint.bubble(0, 1, 1, orders=(0, 0), digits=DIGITS)[0]
        value = loopint.bubble(s, 1, 1, orders=(0, 0), digits=DIGITS)[0] - at_zero
        q = mpmath.mpf(s)
        sigma = mpmath.sqrt(1 - 4 / q)
        if sigma == 0:
            expected = mpmath.mpf(2)
        elif q < 0:
            expected = 2 + sigma * mpmath.log((sigma - 1) / (sigma + 1))
        else:
            expected = 2 + sigma * (mpmath.log((1 - sigma) / (1 + sigma)) + 1j * mpmath.pi)
        assert abs(value - expected) < TINY


@pytest.mark.parametrize("s", ["-5", "-0.1", "-3000"])
def test_unequal_mass_loop_function_of_chiral_perturbation_theory(s: str) -> None:
    """Gasser, Leutwyler, Nucl. Phys. B250 (1985) 465, appendix A (from memory), for s < 0:

    32 pi^2 Jbar = 2 + [D/s - S/D] log(M2^2/M1^2)
                   - nu/s log( ((s+nu)^2 - D^2)/((s-nu)^2 - D^2) ).
    """
    with mpmath.workdps(60):
        a, b, q = mpmath.mpf("1.75"), mpmath.mpf("0.375"), mpmath.mpf(s)
        delta, total = a - b, a + b
        nu = mpmath.sqrt((q - total) ** 2 - 4 * a * b)
        expected = (
            2
            + (delta / q - total / delta) * mpmath.log(b / a)
            - nu / q * mpmath.log(((q + nu) ** 2 - delta**2) / ((q - nu) ** 2 - delta**2))
        ) / 2
        value = (
            loopint.bubble(s, "1.75", "0.375", orders=(0, 0), digits=DIGITS)[0]
            - loopint.bubble(0, "1.75", "0.375", orders=(0, 0), digits=DIGITS)[0]
        )
        assert abs(value - expected) < TINY


@pytest.mark.parametrize("p", ["-2.5", "2.5"])
@pytest.mark.parametrize("measure", ["plain", "msbar", "gamma", "r_gamma", "two_pi"])
def test_massless_g_function(p: str, measure: str) -> None:
    """Gamma(eps) Gamma(1-eps)^2/Gamma(2-2 eps) (-p^2-i0)^(-eps).

    Chetyrkin, Kataev, Tkachov, Nucl. Phys. B174 (1980) 345; mpmath.gamma at eps = 1e-5.
    """
    with mpmath.workdps(90):
        e = mpmath.mpf(10) ** -5
        gamma = mpmath.gamma
        factor = {
            "plain": 1,
            "msbar": mpmath.exp(mpmath.euler * e),
            "gamma": 1 / gamma(1 + e),
            "r_gamma": gamma(1 - 2 * e) / gamma(1 + e) / gamma(1 - e) ** 2,
            "two_pi": (4 * mpmath.pi) ** (e - 2),
        }[measure]
        q = mpmath.mpf(p)
        logarithm = mpmath.log(abs(q)) - (1j * mpmath.pi if q > 0 else 0)
        expected = (
            factor * gamma(e) * gamma(1 - e) ** 2 / gamma(2 - 2 * e) * mpmath.exp(-e * logarithm)
        )
        series = loopint.bubble(p, 0, 0, orders=(-2, 10), digits=80, measure=measure)
        assert series.method == "gamma"
        assert abs(at_epsilon(series, e) / expected - 1) < mpmath.mpf(10) ** -48


@pytest.mark.parametrize("p", ["-2.5", "0.3", "0.999", "1.001", "2.5"])
def test_one_massive_line(p: str) -> None:
    """Gamma(1-eps) Gamma(eps)/Gamma(2-eps) (m^2)^(-eps) 2F1(eps, 1; 2-eps; p^2/m^2).

    Boos, Davydychev, Theor. Math. Phys. 89 (1991) 1052; mpmath.hyp2f1 at eps = 1e-5.
    """
    with mpmath.workdps(90):
        e = mpmath.mpf(10) ** -5
        z = mpmath.mpf(p)
        gauss = mpmath.hyp2f1(e, 1, 2 - e, z)
        if z > 1:  # p^2 + i0: mpmath continues from below the cut, that is p^2 - i0
            gauss = mpmath.conj(gauss) if mpmath.im(gauss) < 0 else gauss
        expected = mpmath.exp(mpmath.euler * e) * mpmath.gamma(e) / (1 - e) * gauss
        series = loopint.bubble(p, 1, 0, orders=(-1, 10), digits=80)
        assert abs(at_epsilon(series, e) / expected - 1) < mpmath.mpf(10) ** -48
        swapped = loopint.bubble(p, 0, 1, orders=(-1, 10), digits=80)
        assert abs(at_epsilon(swapped, e) / expected - 1) < mpmath.mpf(10) ** -48


def log_sine(j: int, theta: mpmath.mpf) -> mpmath.mpf:
    """Return Ls_j(theta) = -Int_0^theta log^(j-1) |2 sin(t/2)| dt (Lewin 1981)."""
    return -mpmath.quad(lambda t: mpmath.log(abs(2 * mpmath.sin(t / 2))) ** (j - 1), [0, theta])


@pytest.mark.parametrize(("p", "m1", "m2"), [("2.4", "0.9", "0.4"), ("1", "1", "1")])
def test_all_order_expansion_in_log_sine_integrals(p: str, m1: str, m2: str) -> None:
    """Davydychev, hep-ph/9910224 (Phys. Rev. D61 (2000) 087701): all orders between thresholds.

    With N = 1/Gamma(1+eps), tau_i = arccos((m_i^2 - m_j^2 + p^2)/(2 m_i sqrt(p^2))), from memory:

    2 (1-2 eps) B = (m1^-2eps + m2^-2eps)/eps + (m1^2-m2^2)/(eps p^2) (m1^-2eps - m2^-2eps)
      + (-lambda)^(1/2-eps)/(p^2)^(1-eps)
        sum_j (2 eps)^j/j! sum_i [Ls_{j+1}(pi) - Ls_{j+1}(2 tau_i)].
    """
    with mpmath.workdps(40):
        q, a, b = mpmath.mpf(p), mpmath.mpf(m1), mpmath.mpf(m2)
        lam = (q - a - b) ** 2 - 4 * a * b
        root = mpmath.sqrt(q)
        taus = [
            mpmath.acos((a - b + q) / (2 * mpmath.sqrt(a) * root)),
            mpmath.acos((b - a + q) / (2 * mpmath.sqrt(b) * root)),
        ]
        top = 4
        sines = [
            mpmath.fsum(log_sine(j + 1, mpmath.pi) - log_sine(j + 1, 2 * t) for t in taus)
            for j in range(top + 1)
        ]
        e = mpmath.mpf(10) ** -6
        series = loopint.bubble(p, m1, m2, orders=(-1, top), digits=38, measure="gamma")
        left = 2 * (1 - 2 * e) * at_epsilon(series, e)
        right = (a**-e + b**-e) / e + (a - b) / (e * q) * (a**-e - b**-e)
        power = (-lam) ** (mpmath.mpf(1) / 2 - e) / q ** (1 - e)
        right += power * mpmath.fsum(
            (2 * e) ** j / mpmath.factorial(j) * sines[j] for j in range(top + 1)
        )
        assert abs(left - right) < mpmath.mpf(10) ** -27


@pytest.mark.parametrize("q", ["-0.001", "0.001", "-1e8"])
def test_vacuum_polarisation_of_qed(q: str) -> None:
    """Peskin, Schroeder (1995), eq. (7.90)-(7.91), small and large momentum limits.

    Int x(1-x) log(1 - x(1-x) r) dx from B: -[(1 + 2/r)(B(r) - B(0)) - 1/3]/6 (reduction by parts),
    r = q^2/m^2; limits -r/30 and (log(-r) - 5/3)/6.
    """
    with mpmath.workdps(50):
        r = mpmath.mpf(q)
        difference = (
            loopint.bubble(q, 1, 1, orders=(0, 0), digits=DIGITS)[0]
            - loopint.bubble(0, 1, 1, orders=(0, 0), digits=DIGITS)[0]
        )
        found = (-((1 + 2 / r) * difference - mpmath.mpf(1) / 3) / 6).real
        direct = mpmath.quad(lambda x: x * (1 - x) * mpmath.log(1 - x * (1 - x) * r), [0, 0.5, 1])
        assert abs(found / direct - 1) < mpmath.mpf(10) ** -25
        if abs(r) < 1:
            assert abs(found / (-r / 30) - 1) < abs(r)
        else:
            assert abs(found - (mpmath.log(-r) - mpmath.mpf(5) / 3) / 6) < 10 / abs(r)


@pytest.mark.parametrize(("p", "m1", "m2"), [s for s in SAMPLES if float(s[0]) > 2.6])
def test_unitarity(p: str, m1: str, m2: str) -> None:
    """Im B = pi sqrt(lambda)/p^2 above threshold (Cutkosky 1960; any textbook)."""
    with mpmath.workdps(50):
        q, a, b = mpmath.mpf(p), mpmath.mpf(m1), mpmath.mpf(m2)
        expected = mpmath.pi * mpmath.sqrt((q - a - b) ** 2 - 4 * a * b) / q
        assert abs(loopint.bubble(p, m1, m2, digits=DIGITS)[0].imag - expected) < TINY


@pytest.mark.parametrize(("p", "m1", "m2"), [s for s in SAMPLES if float(s[0]) < 2.6])
def test_imaginary_part_vanishes_exactly_below_threshold(p: str, m1: str, m2: str) -> None:
    series = loopint.bubble(p, m1, m2, orders=(-1, 5))
    assert all(series[k].imag == 0 for k in series)


def test_once_subtracted_dispersion_relation() -> None:
    """B(p^2) - B(0) = p^2/pi Int ds Im B(s)/(s (s-p^2)) (any textbook on dispersion relations).

    The O(eps) coefficient obeys it too; its imaginary part is sampled from the package.
    """
    p = -2
    start = mpmath.mpf(4)

    def integral(order: int) -> mpmath.mpf:
        def integrand(t: mpmath.mpf) -> mpmath.mpf:  # s = 4/(1 - t^2), regular at threshold
            s = start / (1 - t * t)
            im = loopint.bubble(s, 1, 1, orders=(0, 1), digits=20)[order].imag
            return im / (s * (s - p)) * 2 * t * s / (1 - t * t)

        value, error = mpmath.quad(integrand, [0, 0.5, 1], error=True, maxdegree=6)
        assert error < 1e-12
        return p / mpmath.pi * value

    with mpmath.workdps(20):
        for order in (0, 1):
            left = (
                loopint.bubble(p, 1, 1, digits=20)[order]
                - loopint.bubble(0, 1, 1, digits=20)[order]
            )
            assert abs(left.real - integral(order)) < mpmath.mpf(10) ** -11


@pytest.mark.parametrize(
    ("m1", "m2"), [("1", "0.25"), (("1", "-0.3"), ("0.5", "-2")), (("4", "-1e-9"), "1"), ("2", "0")]
)
@pytest.mark.parametrize("p", ["-3", "0.2", "2.25", "9", "30"])
def test_against_double_exponential_quadrature(p: str, m1: object, m2: object) -> None:
    """Takahasi-Mori quadrature of the Feynman parameter in mpmath, orders -1..3."""

    def pair(value: object) -> object:
        return tuple(map(Fraction, value)) if isinstance(value, tuple) else Fraction(value)

    if p == "2.25" and m1 == "1":
        return  # exactly at threshold, covered elsewhere
    expected = bubble_by_quadrature(Fraction(p), pair(m1), pair(m2), 3, 25)
    series = loopint.bubble(p, m1, m2, orders=(-1, 3), digits=30)
    for k in series:
        assert abs(series[k] - expected[k]) < mpmath.mpf(10) ** -22 * (1 + abs(expected[k])), k
