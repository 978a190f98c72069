"""A campaign over everything that can be evaluated, against every route that applies.

    python -m tests.campaign_all --count 2000 --seed 1 [--limit SECONDS] [--minutes M]

A seed draws an integral of any family (powers of either sign, n + a eps, derivatives), dimension,
orders, conventions and digits (5 to 1000) at a random or structured point: ulp neighbours of
special points, exact thresholds with rational masses, distances to 1e-300, subnormals, scales
1e+-300, widths from 1e-40 to 1000 masses, integers of 300 digits, small rationals at which
coefficients vanish.  Then

digits        the same at more digits: both bounds hold, and the status keeps its promise
symmetry      lines exchanged
scaling       p^2, masses and mu^2 times a rational
conventions   the other propagator sign, another measure
parts         integration by parts (Chetyrkin, Tkachov, Nucl. Phys. B192 (1981) 159)
dimension     the shift of the dimension (Tarasov, hep-th/9606018)
difference    a derivative against a quotient of differences
published     the sum of the series at a small eps against mpmath's gamma and hyp2f1
balls, mpmath the Feynman-parameter integral
doubles       `bubble_array`, `tadpole_array`
rows          `loopint.evaluate`
scipy         scipy.special.hyp2f1 and spence

What comes out: misses (a bound violated), exceptions that are no refusals, evaluations below the
digits asked for, evaluations over the limit of time, and the slowest.
"""

from __future__ import annotations

import argparse
import math
import random
import signal
import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import Any

import mpmath
import numpy as np
import scipy.special
from flint import acb, arb

import loopint
from loopint.core.conventions import Conventions
from loopint.core.kinematics import OnePoint, TwoPoint
from loopint.core.laurent import LaurentSeries
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.quadrature import integrate_feynman
from tests.reference import at_epsilon, to_mp
from tests.test_propagator import published

MEASURES = ["msbar", "plain", "gamma", "r_gamma", "two_pi"]
SIGNS = ["minkowski", "euclidean"]
RATES = [Fraction(0), Fraction(1), Fraction(1, 2), Fraction(2), Fraction(-1, 3)]
SMALL = [Fraction(n) for n in (0, 1, 1, 2, 3, 4, 9)] + [Fraction(1, 2), Fraction(4, 9)]
EPSILON = Fraction(1, 10**8)
MAX_BITS = 4000  # of an evaluation that is to be quick

Number = Any  # a Fraction, or a pair of them


@dataclass(frozen=True)
class Drawn:
    """One integral at one point."""

    family: str
    kind: str
    kinematics: tuple[Number, ...]
    powers: Any
    dimension: int
    orders: tuple[int, int]
    digits: int
    measure: str = "msbar"
    sign: str = "minkowski"
    mu_squared: Fraction = Fraction(1)
    derivatives: tuple[str, ...] = ()

    def evaluate(self, **changes: Any) -> LaurentSeries:
        """Evaluate through the public function of the family."""
        d = replace(self, **changes)
        return getattr(loopint, d.family)(
            *d.kinematics,
            d.powers,
            dimension=d.dimension,
            orders=d.orders,
            digits=d.digits,
            mu_squared=d.mu_squared,
            propagator_sign=d.sign,
            measure=d.measure,
            derivatives=d.derivatives,
            max_precision_bits=max(MAX_BITS, 8 * d.digits),
        )

    @property
    def conventions(self) -> Conventions:
        return Conventions.parse(self.measure, self.sign, self.mu_squared)

    @property
    def point(self) -> OnePoint | TwoPoint:
        if self.family == "tadpole":
            return OnePoint(exact_complex(self.kinematics[0]))
        p, m1, m2 = self.kinematics
        return TwoPoint(exact_real(p), exact_complex(m1), exact_complex(m2))

    @property
    def pairs(self) -> list[tuple[int, Fraction]]:
        """The powers as pairs (n, a) for n + a eps."""
        powers = (self.powers,) if isinstance(self.powers, int) else self.powers
        return [(n, Fraction(0)) if isinstance(n, int) else n for n in powers]


# --- drawing ------------------------------------------------------------------------------------


def logarithmic(rng: random.Random, low: float, high: float) -> Fraction:
    """Draw a positive rational whose logarithm is uniform."""
    exponent = rng.uniform(low, high)
    whole = math.floor(exponent)
    digits = Fraction(round(10 ** (exponent - whole) * 1000), 1000)
    return digits * Fraction(10) ** whole


def tiny(rng: random.Random) -> Fraction:
    """Draw 0, or +-10^-k with k to 300."""
    k = rng.choice([1, 5, 16, 40, rng.randint(1, 300)])
    return rng.choice([0, 1, 1, -1, -1]) * Fraction(1, 10**k)


def unstable(rng: random.Random, m_squared: Fraction) -> Number:
    """Give a mass a width from 1e-40 to 1000 times itself, or a Re m^2 <= 0."""
    width = m_squared * logarithmic(rng, *rng.choice([(-40, 0), (-3, 3)]))
    return rng.choice([m_squared, m_squared, Fraction(0), -m_squared]), -width


def near_special(rng: random.Random, exact: bool) -> tuple[Number, ...]:
    """Thresholds, pseudothresholds and on-shell points: exactly, near, or an ulp beside."""
    a, b = (Fraction(rng.randint(1, 12), rng.randint(1, 6)) for _ in range(2))
    special = [(a + b) ** 2, (a - b) ** 2, a * a, abs(a * a - b * b), a * a + b * b]
    p, m1, m2 = rng.choice(special), a * a, rng.choice([b * b, b * b, a * a, Fraction(0)])
    if exact:
        return p * (1 + tiny(rng)), m1, m2
    floats = [float(x) for x in (p, m1, m2)]
    for i in range(3):
        for _ in range(rng.randint(0, 2)):
            floats[i] = math.nextafter(floats[i], rng.choice([0.0, math.inf]))
    return tuple(Fraction(x) for x in floats)


def two_point(rng: random.Random, kind: str) -> tuple[Number, ...]:
    """Draw p^2, m1^2, m2^2."""
    sign = rng.choice([-1, 1])
    m1, m2, p = (logarithmic(rng, -2, 2) for _ in range(3))
    match kind:
        case "near":
            return near_special(rng, exact=True)
        case "ulp":
            return near_special(rng, exact=False)
        case "simple":
            return rng.choice([*SMALL, *(-x for x in SMALL)]), rng.choice(SMALL), rng.choice(SMALL)
        case "near_on_shell":
            return m2 * (1 + tiny(rng)), Fraction(0), m2
        case "small_momentum":
            return tiny(rng), m1, rng.choice([m2, m1, m1 * (1 + tiny(rng)), Fraction(0)])
        case "scales":
            size = rng.choice([10, 10, 30, 30, 300])
            return tuple(x * logarithmic(rng, -size, size) for x in (sign * p, m1, m2))
        case "common_scale":
            scale = logarithmic(rng, -300, 300)
            return sign * p * scale, m1 * scale, m2 * scale
        case "subnormal":
            return tuple(
                Fraction(rng.choice([5e-324 * rng.randint(1, 9), 2.0**-1022, 1.0]))
                for _ in range(3)
            )
        case "integers":
            return tuple(Fraction(rng.randint(1, 10 ** rng.choice([1, 300]))) for _ in range(3))
        case "complex":
            return sign * p, unstable(rng, m1), rng.choice([m2, unstable(rng, m2)])
        case "near_complex":
            p, m1, m2 = near_special(rng, exact=True)
            return p, unstable(rng, m1), m2
        case "one_massless":
            return sign * p, Fraction(0), rng.choice([m2, unstable(rng, m2)])
        case "both_massless":
            return sign * p, Fraction(0), Fraction(0)
        case "zero_momentum":
            return Fraction(0), rng.choice([m1, unstable(rng, m1)]), rng.choice([m1, m2])
    return sign * p, m1, m2


KINDS = [
    "general", "near", "ulp", "simple", "simple", "near_on_shell", "small_momentum", "scales",
    "common_scale", "subnormal", "integers", "complex", "near_complex", "one_massless",
    "both_massless", "zero_momentum",
]  # fmt: skip


def draw(seed: int, most_digits: int = 1000) -> Drawn:
    """Draw an integral and a point."""
    rng = random.Random(seed)
    family = rng.choice(["tadpole", "bubble", "bubble", "bubble", "propagator", "propagator"])
    digits = round(math.exp(rng.uniform(math.log(5), math.log(rng.choice([40, most_digits])))))
    lowest = rng.choice([-2, -2, -1, 0, rng.randint(-9, 5)])
    orders = (lowest, lowest + rng.randint(0, 5 - max(lowest, 0)))
    dimension = rng.choice([4, rng.randint(1, 12)])
    kind = rng.choice(KINDS)
    kinematics = two_point(rng, kind)
    if rng.random() < 0.5:
        kinematics = (kinematics[0], kinematics[2], kinematics[1])
    variables = ["p_squared", "m1_squared", "m2_squared"]
    low, high = rng.choice([(1, 1), (1, 3), (-2, 3), (-2, 3), (-10, 10)])
    powers: Any = (rng.randint(low, high), rng.randint(low, high))
    if family == "tadpole":
        kinematics, variables, powers = kinematics[1:2], ["m_squared"], powers[0]
    if family == "propagator":
        powers = tuple((n, rng.choice(RATES)) for n in powers)
    count = rng.choice([0, 0, 0, 1, rng.randint(1, 3)])
    return Drawn(
        family,
        kind,
        kinematics,
        powers,
        dimension,
        orders,
        digits,
        rng.choice(MEASURES),
        rng.choice(SIGNS),
        rng.choice([Fraction(1), logarithmic(rng, -3, 3), Fraction(1, 10**30)]),
        tuple(rng.choice(variables) for _ in range(count)),
    )


# --- comparing ----------------------------------------------------------------------------------


class NotApplicableError(Exception):
    """The route says nothing about this integral."""


def require(condition: object) -> None:
    if not condition:
        raise NotApplicableError


def apart(a: LaurentSeries, b: LaurentSeries, factor: Number = 1) -> str:
    """Return the orders at which a and factor * b, with their bounds, cannot be the same."""
    bad = []
    with mpmath.workdps(max(a.digits, b.digits) + 40):
        scale = mpmath.mpmathify(to_mp(factor)) if isinstance(factor, Fraction) else factor
        for k in a:
            if k not in b:
                continue
            slack = abs(a[k]) * mpmath.mpf(10) ** -(max(a.digits, b.digits) + 20)
            allowed = a.bounds[k] + b.bounds[k] * abs(scale) + slack
            if not abs(a[k] - scale * b[k]) <= allowed:
                bad.append(k)
    return f"orders {bad}" if bad else ""


def check_digits(drawn: Drawn, found: LaurentSeries) -> str:
    """Compare with more digits; a value that is "ok" has the digits asked for."""
    if found.status == "ok":
        for k in found:
            if found.bounds[k] > abs(found[k]) * mpmath.mpf(10) ** -drawn.digits * (1 + 1e-9):
                return f"bound of order {k} is larger than promised"
    return apart(found, drawn.evaluate(digits=drawn.digits + 30))


def check_symmetry(drawn: Drawn, found: LaurentSeries) -> str:
    require(drawn.family != "tadpole")
    p, m1, m2 = drawn.kinematics
    exchange = {"m1_squared": "m2_squared", "m2_squared": "m1_squared", "p_squared": "p_squared"}
    names = tuple(exchange[name] for name in drawn.derivatives)
    powers = tuple(reversed(drawn.powers))
    return apart(found, drawn.evaluate(kinematics=(p, m2, m1), powers=powers, derivatives=names))


def scaled(value: Number, factor: Fraction) -> Number:
    return tuple(x * factor for x in value) if isinstance(value, tuple) else value * factor


def check_scaling(drawn: Drawn, found: LaurentSeries) -> str:
    require(all(a == 0 for _, a in drawn.pairs))  # else a power of the factor depends on eps
    factor = Fraction(49, 9)  # a square: half-integer powers are rational
    other = drawn.evaluate(
        kinematics=tuple(scaled(x, factor) for x in drawn.kinematics),
        mu_squared=drawn.mu_squared * factor,
    )
    weight = drawn.dimension - 2 * (sum(n for n, _ in drawn.pairs) + len(drawn.derivatives))
    return apart(found, other, Fraction(7, 3) ** -weight)


def check_conventions(drawn: Drawn, found: LaurentSeries) -> str:
    """Change the sign, and go from `plain` to `msbar` by multiplying with exp(gamma_E eps)."""
    require(all(a == 0 for _, a in drawn.pairs))
    other = drawn.evaluate(sign=SIGNS[drawn.sign == SIGNS[0]])
    text = apart(found, other, Fraction((-1) ** sum(n for n, _ in drawn.pairs)))
    if text or drawn.measure != "msbar":
        return text
    lowest = min(drawn.orders[0], -2)
    plain = drawn.evaluate(measure="plain", orders=(lowest, drawn.orders[1]))
    with mpmath.workdps(drawn.digits + 40):
        for k in found:
            weights = [
                (mpmath.euler**j / mpmath.factorial(j), k - j) for j in range(k - lowest + 1)
            ]
            total = mpmath.fsum(w * plain[i] for w, i in weights)
            allowed = mpmath.fsum(
                w * (plain.bounds[i] + abs(plain[i]) * mpmath.mpf(10) ** -(drawn.digits + 25))
                for w, i in weights
            )
            if abs(total - found[k]) > allowed + found.bounds[k]:
                return f"measure, order {k}"
    return ""


def coefficient(series: LaurentSeries, k: int) -> acb:
    return acb(series.balls[k]) if k in series.balls else acb(0)


def relation(terms: list[tuple[tuple[Fraction, Fraction], LaurentSeries, acb]], top: int) -> str:
    """Check that sum (c + r eps) z series = 0 at every order; all in balls."""
    for k in range(-3, top + 1):
        total = acb(0)
        for (constant, rate), series, z in terms:
            part = coefficient(series, k) * arb(exact_real(constant))
            part += coefficient(series, k - 1) * arb(exact_real(rate))
            total += part * z
        if not total.contains(0):
            return f"order {k}: {total.str(5)}"
    return ""


def check_parts(drawn: Drawn, found: LaurentSeries) -> str:
    """Use (d-2nu1-nu2) - 2 m1^2 nu1 1+ - nu2 2+ (1- + m1^2 + m2^2 - p^2) = 0, minkowski sign."""
    require(drawn.family != "tadpole" and max(abs(n) for n, _ in drawn.pairs) < 11)
    (n1, a1), (n2, a2) = drawn.pairs
    p, m1, m2 = (exact_complex(x) for x in drawn.kinematics)

    def integral(i: int, j: int) -> LaurentSeries:
        powers: Any = (n1 + i, n2 + j)
        if drawn.family == "propagator":
            powers = ((n1 + i, a1), (n2 + j, a2))
        return drawn.evaluate(
            powers=powers, sign="minkowski", orders=(-3, found.orders[1]), derivatives=()
        )

    require(found.orders[1] >= -3)
    with working_precision(64 + 4 * drawn.digits):
        gap = m1 + m2 - p
        terms = [
            ((Fraction(drawn.dimension - 2 * n1 - n2), -2 - 2 * a1 - a2), integral(0, 0), acb(1)),
            ((Fraction(n1), a1), integral(1, 0), acb(-2 * m1.ball())),
            ((Fraction(n2), a2), integral(-1, 1), acb(-1)),
            ((Fraction(n2), a2), integral(0, 1), acb(-gap.ball())),
        ]
        return relation(terms, found.orders[1])


def check_dimension(drawn: Drawn, found: LaurentSeries) -> str:
    """Use B^(d-2) = nu1 1+ B^d + nu2 2+ B^d for the euclidean sign."""
    require(drawn.family == "bubble" and drawn.dimension > 2 and drawn.measure != "two_pi")
    require(max(abs(n) for n, _ in drawn.pairs) < 12 and found.orders[1] >= -3)
    n1, n2 = drawn.powers

    def integral(i: int, j: int, dimension: int) -> LaurentSeries:
        return drawn.evaluate(
            powers=(n1 + i, n2 + j),
            dimension=dimension,
            sign="euclidean",
            orders=(-3, found.orders[1]),
            derivatives=(),
        )

    zero = Fraction(0)
    with working_precision(64 + 4 * drawn.digits):
        terms = [
            ((Fraction(-1), zero), integral(0, 0, drawn.dimension - 2), acb(1)),
            ((Fraction(n1), zero), integral(1, 0, drawn.dimension), acb(1)),
            ((Fraction(n2), zero), integral(0, 1, drawn.dimension), acb(1)),
        ]
        return relation(terms, found.orders[1])


def check_difference(drawn: Drawn, found: LaurentSeries) -> str:
    """Compare a first derivative with the quotient of differences of the integral."""
    require(len(drawn.derivatives) == 1)
    require(drawn.kind in {"general", "simple", "complex", "one_massless", "zero_momentum"})
    require("threshold" not in found.region and "shell" not in found.region)
    names = (
        ["m_squared"] if drawn.family == "tadpole" else ["p_squared", "m1_squared", "m2_squared"]
    )
    place = names.index(drawn.derivatives[0])
    value = drawn.kinematics[place]
    size = max(abs(x) for x in value) if isinstance(value, tuple) else abs(value)
    require(size)
    step = size * Fraction(1, 10**30)
    ends = []
    for sign in (1, -1):
        moved = list(drawn.kinematics)
        moved[place] = (
            (value[0] + sign * step, value[1]) if isinstance(value, tuple) else value + sign * step
        )
        ends.append(drawn.evaluate(kinematics=tuple(moved), derivatives=(), digits=90))
    with mpmath.workdps(120):
        weight = Fraction(drawn.dimension, 2) - sum(n for n, _ in drawn.pairs) - 1
        natural = to_mp(size) ** to_mp(weight)
        for k in found:
            slope = (ends[0][k] - ends[1][k]) / (2 * to_mp(step))
            error = abs(ends[0][k]) * mpmath.mpf(10) ** -15 / to_mp(size)
            error += abs(slope) * mpmath.mpf(10) ** -20 + natural * mpmath.mpf(10) ** -40
            if abs(slope - found[k]) > error + found.bounds[k]:
                return f"order {k}: {mpmath.nstr(slope, 20)}"
    return ""


def check_published(drawn: Drawn, found: LaurentSeries) -> str:
    """Sum the series through eps^9 at a small eps and compare with mpmath in d dimensions."""
    require(drawn.kind not in {"subnormal", "integers", "scales", "common_scale"})
    many = replace(drawn, measure="msbar", sign="minkowski", mu_squared=Fraction(1)).evaluate(
        orders=(-4, 9), digits=110, derivatives=()
    )
    with mpmath.workdps(150 + 3 * lost_digits(drawn)):
        e = to_mp(EPSILON)
        half = mpmath.mpf(drawn.dimension) / 2 - e
        nus = [n + to_mp(a) * e for n, a in drawn.pairs]
        expected = mpmath.exp(mpmath.euler * e - 1j * mpmath.pi * mpmath.fsum(nus))
        expected *= closed_form(drawn, nus, half)
        total = at_epsilon(many, e)
        size = max(abs(many[k] * e**k) for k in many)
        cut = max(abs(many[k]) for k in range(6, 10)) * 10**4 * e**10
        if abs(total - expected) > cut + (size + abs(expected)) * mpmath.mpf(10) ** -75:
            return f"{mpmath.nstr(total, 20)} against {mpmath.nstr(expected, 20)}"
    return ""


def lost_digits(drawn: Drawn) -> int:
    """Return how many digits rounding p^2/m^2 costs near p^2 = m^2."""
    if drawn.family == "tadpole" or any(isinstance(x, tuple) for x in drawn.kinematics):
        return 0
    p, m1, m2 = drawn.kinematics
    gap = abs(p - m1 - m2)
    return len(str(math.ceil(abs(p) / gap))) if gap else 0


def closed_form(drawn: Drawn, nus: list[Any], half: Any) -> Any:
    """Evaluate the euclidean integral at a number eps by a published closed form in mpmath."""
    if drawn.family == "tadpole":
        mass = mpmath.mpmathify(to_mp(drawn.kinematics[0]))
        require(mass != 0 and drawn.powers > 0)
        return mpmath.gamma(nus[0] - half) * mpmath.rgamma(nus[0]) * mass ** (half - nus[0])
    p, m1, m2 = drawn.kinematics
    if m1 != 0 and m2 == 0:
        m1, m2, nus = m2, m1, nus[::-1]
    require(m1 == 0 or p == 0)
    require(m2 != 0 or p != 0)
    kind = "both_massless" if m2 == 0 else "on_shell" if p == m2 else ""
    return published(kind, p, m1, m2, *nus, half)


def feynman(drawn: Drawn, arithmetic: Any) -> str:
    """Compare with the integral over the Feynman parameter."""
    require(not drawn.derivatives)
    require(drawn.family == "tadpole" or min(n for n, _ in drawn.pairs) >= 1)
    digits = min(drawn.digits, 25)
    found = drawn.evaluate(digits=digits)
    powers = tuple((n, a) if a else n for n, a in drawn.pairs)
    result = integrate_feynman(
        drawn.point,
        powers,
        drawn.dimension,
        drawn.orders,
        drawn.conventions,
        digits=digits,
        arithmetic=arithmetic,
    )
    for k in found:
        if not result.errors[k] < mpmath.inf:
            continue
        margin = 1 if result.proven else 10
        if abs(found[k] - result.values[k]) > found.bounds[k] + margin * result.errors[k]:
            return f"order {k}: {mpmath.nstr(result.values[k], 20)} +- {result.errors[k]}"
    return ""


def check_balls(drawn: Drawn, found: LaurentSeries) -> str:
    return feynman(drawn, "balls")


def check_mpmath(drawn: Drawn, found: LaurentSeries) -> str:
    return feynman(drawn, "mpmath")


def as_floats(drawn: Drawn) -> list[float | complex]:
    """Return the kinematics rounded to doubles that stay valid."""
    result: list[float | complex] = []
    for x in drawn.kinematics:
        largest = max(map(abs, x)) if isinstance(x, tuple) else abs(x)
        require(largest < Fraction(10) ** 300)
        result.append(complex(float(x[0]), float(x[1])) if isinstance(x, tuple) else float(x))
        require(not isinstance(x, tuple) or result[-1].imag != 0)
    return result


def check_doubles(drawn: Drawn, found: LaurentSeries) -> str:
    require(drawn.family != "propagator")
    floats = as_floats(drawn)
    exact = tuple(
        (Fraction(x.real), Fraction(x.imag)) if isinstance(x, complex) else Fraction(x)
        for x in floats
    )
    reference = drawn.evaluate(kinematics=exact, digits=30)
    result = getattr(loopint, f"{drawn.family}_array")(
        *(np.array([x]) for x in floats),
        drawn.powers,
        dimension=drawn.dimension,
        orders=drawn.orders,
        mu_squared=drawn.mu_squared,
        propagator_sign=drawn.sign,
        measure=drawn.measure,
        derivatives=drawn.derivatives,
    )
    for k in reference:
        value, bound = complex(result[k][0]), float(result.bounds[k][0])
        if not math.isfinite(bound):
            continue
        distance = abs(mpmath.mpc(value) - reference[k])
        if distance > mpmath.mpf(bound) + reference.bounds[k]:
            return f"order {k}: {value} +- {bound}, is {mpmath.nstr(reference[k], 20)}"
    return ""


def check_rows(drawn: Drawn, found: LaurentSeries) -> str:
    """Run one row of a table."""
    names = (
        ["m_squared"] if drawn.family == "tadpole" else ["p_squared", "m1_squared", "m2_squared"]
    )
    require(drawn.digits <= 50 and not drawn.derivatives)
    require(not any(isinstance(x, tuple) for x in drawn.kinematics))
    powers = [[n, str(a)] if a else n for n, a in drawn.pairs]
    integral = {
        "name": "B",
        "family": drawn.family,
        "powers": powers,
        "dimension": drawn.dimension,
        "orders": list(drawn.orders),
        **{name: name for name in names},
    }
    points = {name: [value] for name, value in zip(names, drawn.kinematics, strict=True)}
    table = loopint.evaluate(
        points,
        [integral],
        digits=drawn.digits,
        layout="long",
        mu_squared=drawn.mu_squared,
        propagator_sign=drawn.sign,
        measure=drawn.measure,
        on_error="raise",
    )
    for row in table.to_pylist():
        k, value = row["order"], mpmath.mpc(row["re"], row["im"])
        with mpmath.workdps(drawn.digits + 20):
            bound = mpmath.mpf(row["re_bound"]) + mpmath.mpf(row["im_bound"]) + found.bounds[k]
            if mpmath.isfinite(bound) and abs(value - found[k]) > bound * (1 + mpmath.mpf(1e-9)):
                return f"order {k}: {value} +- {bound}"
    return ""


def check_scipy(drawn: Drawn, found: LaurentSeries) -> str:
    """One massless line below threshold: hyp2f1 in odd dimensions, spence for eps^1 in d0 = 4."""
    require(drawn.family == "bubble")
    p, m1, m2 = as_floats(drawn)
    n1, n2 = drawn.powers
    if m1 != 0 and m2 == 0:
        m1, m2, n1, n2 = m2, m1, n2, n1
    require(m1 == 0 and not isinstance(m2, complex) and m2 and abs(math.log10(m2)) < 3)
    z = p / m2
    require(-20 < z < 0.9 and min(n1, n2) >= 1 and max(n1, n2) <= 3)
    sign = (-1) ** (n1 + n2) if drawn.sign == "minkowski" else 1
    found = replace(drawn, measure="msbar", mu_squared=Fraction(1)).evaluate(
        kinematics=tuple(Fraction(x) for x in as_floats(drawn)), orders=(0, 1), derivatives=()
    )
    if drawn.dimension % 2:
        h, gamma = drawn.dimension / 2, math.gamma
        value = gamma(h - n1) * gamma(n1 + n2 - h) / gamma(h) / gamma(n2) * m2 ** (h - n1 - n2)
        value *= sign * scipy.special.hyp2f1(n1 + n2 - h, n1, h, z)
        terms, order = abs(value) + 1e-3 * m2 ** (h - n1 - n2), 0
    else:
        require(drawn.dimension == 4 and n1 == n2 == 1 and abs(z) > 1e-3)
        value, terms, order = first_order_by_spence(z, m2), 10.0, 1
        terms = abs(value) + terms
    if abs(found[order] - value) > 1e-9 * terms:
        return f"order {order}: {value}"
    return ""


def first_order_by_spence(z: float, mass: float) -> float:
    """Order eps of B(1,1), d0 = 4, one massless line, z = p^2/m^2 < 1, mass = m^2/mu^2.

    It is zeta(2)/2 + Int L^2/2 dx with L = log(m^2) + log(x) + log(1-z+zx); integration by parts
    leaves Int log(x) log(1-z+zx) dx = 2 + (1-z)/z (Li2(-z/(1-z)) + log(1-z)).
    """
    a, y = math.log(mass), 1 - z
    log_y = math.log(y)
    single = -1 - (y * log_y + z) / z
    squares = 2 + (2 - y * log_y**2 + 2 * y * log_y - 2 * y) / z
    mixed = 2 + y / z * (scipy.special.spence(1 + z / y) + log_y)
    return math.pi**2 / 12 + (a * a + 2 * a * single + squares + 2 * mixed) / 2


CHECKS: dict[str, Callable[[Drawn, LaurentSeries], str]] = {
    "digits": check_digits,
    "symmetry": check_symmetry,
    "scaling": check_scaling,
    "conventions": check_conventions,
    "parts": check_parts,
    "dimension": check_dimension,
    "difference": check_difference,
    "published": check_published,
    "balls": check_balls,
    "mpmath": check_mpmath,
    "doubles": check_doubles,
    "rows": check_rows,
    "scipy": check_scipy,
}


# --- running ------------------------------------------------------------------------------------


class TooSlowError(Exception):
    """An evaluation took longer than the limit."""


@contextmanager
def time_limit(seconds: float) -> Iterator[None]:
    """Raise `TooSlowError` after so many seconds of this block."""

    def stop(*_: object) -> None:
        raise TooSlowError

    previous = signal.signal(signal.SIGALRM, stop)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, previous)


@dataclass
class Outcome:
    """What came of one seed: findings by route, and the time of the evaluation itself."""

    seed: int
    status: str
    seconds: float
    tried: list[str] = field(default_factory=list)
    findings: dict[str, str] = field(default_factory=dict)
    slow: list[str] = field(default_factory=list)


def run(seed: int, limit: float = 20.0, most_digits: int = 1000) -> Outcome:
    """Draw, evaluate and compare by every route that applies."""
    drawn = draw(seed, most_digits)
    started = time.perf_counter()
    try:
        with time_limit(limit):
            found = drawn.evaluate()
    except loopint.LoopintError as refusal:
        return Outcome(seed, f"{type(refusal).__name__}: {refusal}", time.perf_counter() - started)
    except TooSlowError:
        return Outcome(seed, "slow", time.perf_counter() - started, slow=["evaluate"])
    except Exception as error:
        outcome = Outcome(seed, "failed", time.perf_counter() - started)
        outcome.findings["evaluate"] = f"{type(error).__name__}: {error}"
        return outcome
    outcome = Outcome(seed, found.status, time.perf_counter() - started)
    if found.status != "ok":
        outcome.findings["status"] = str({k: mpmath.nstr(found.bounds[k], 3) for k in found})
    for name, check in CHECKS.items():
        try:
            with time_limit(limit):
                text = check(drawn, found)
        except (NotApplicableError, loopint.UnsupportedIntegralError, loopint.UnregulatedError):
            continue
        except TooSlowError:
            outcome.slow.append(name)
            continue
        except Exception as error:
            text = f"{type(error).__name__}: {error}"
        outcome.tried.append(name)
        if text:
            outcome.findings[name] = text
    return outcome


def main() -> int:
    """Run the campaign and print what was found; return the number of seeds with findings."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--count", type=int, default=200)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--digits", type=int, default=1000, help="the most digits drawn")
    parser.add_argument("--limit", type=float, default=20.0, help="seconds for one evaluation")
    parser.add_argument("--minutes", type=float, default=math.inf)
    arguments = parser.parse_args()
    end = time.monotonic() + 60 * arguments.minutes
    outcomes = []
    for seed in range(arguments.seed, arguments.seed + arguments.count):
        if time.monotonic() > end:
            break
        outcome = run(seed, arguments.limit, arguments.digits)
        outcomes.append(outcome)
        if outcome.findings:
            print(
                f"seed {seed}: {outcome.findings}\n    {draw(seed, arguments.digits)}", flush=True
            )
    print(f"integrals {len(outcomes)}")
    print("status", dict(Counter(o.status.split(":")[0] for o in outcomes)))
    print("refusals", dict(Counter(o.status for o in outcomes if ":" in o.status).most_common(8)))
    print("comparisons", dict(Counter(name for o in outcomes for name in o.tried)))
    print("over the time limit", dict(Counter(name for o in outcomes for name in o.slow)))
    print("findings", dict(Counter(name for o in outcomes for name in o.findings)))
    for outcome in sorted(outcomes, key=lambda o: -o.seconds)[:8]:
        print(f"{outcome.seconds:8.2f} s  {draw(outcome.seed, arguments.digits)}")
    return sum(bool(o.findings) for o in outcomes)


if __name__ == "__main__":
    raise SystemExit(min(main(), 1))
