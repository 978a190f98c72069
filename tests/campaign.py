"""A long differential campaign for the (1,1) bubble in d0 = 4: proven balls against mpmath.

    python -m tests.campaign --random 10000 --adversarial 2000 --digits 40

Every point is evaluated by the closed form with a proven bound and by mpmath's own arithmetic and
integrator (`loopint.quadrature`, arithmetic "mpmath", which shares no formula with the closed
form).  A miss is a coefficient whose distance exceeds the proven bound plus the error estimate of
the reference.  `tests/test_campaign.py` runs a small part of the same points.
"""

from __future__ import annotations

import argparse
import math
import random
import time
from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from fractions import Fraction
from functools import partial
from typing import TypeAlias

import mpmath

from loopint.core.conventions import Conventions
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.integrals.registry import Integral, evaluate
from loopint.quadrature import integrate_feynman

Mass: TypeAlias = "Fraction | tuple[Fraction, Fraction]"
Kinematics: TypeAlias = "tuple[Fraction, Mass, Mass]"
ORDERS = (-1, 3)


def random_point(rng: random.Random) -> Kinematics:
    """Draw masses over six decades, p^2 of both signs, complex masses in a third of the cases."""

    def scale() -> Fraction:
        return Fraction(round(10 ** rng.uniform(-3, 3), 6)).limit_denominator(10**6)

    def mass() -> Mass:
        if rng.random() < 0.33:
            return scale(), -scale() * Fraction(rng.choice(["0.001", "0.1", "1", "5"]))
        return scale()

    p = scale() * rng.choice([-1, 1, 1, 4])
    return p, mass(), mass()


def adversarial_point(rng: random.Random) -> Kinematics:
    """Draw a point where a careless formula fails."""
    a = Fraction(rng.randint(1, 40), rng.randint(1, 20))
    b = Fraction(rng.randint(1, 40), rng.randint(1, 20))
    tiny = Fraction(1, 10 ** rng.randint(1, 40))
    sign = rng.choice([-1, 1])
    masses: tuple[Mass, Mass] = (a * a, b * b)
    kind = rng.randrange(12)
    if kind == 0:  # at and near threshold
        return (a + b) ** 2 * (1 + sign * rng.choice([Fraction(0), tiny])), *masses
    if kind == 1:  # at and near pseudothreshold
        return (a - b) ** 2 * (1 + sign * rng.choice([Fraction(0), tiny])) or tiny, *masses
    if kind == 2:  # one ulp around a float threshold
        m1, m2 = float(a), float(b)
        p = (m1 + m2) ** 2
        for _ in range(rng.randint(0, 2)):
            p = math.nextafter(p, rng.choice([0.0, math.inf]))
        return Fraction(p), Fraction(m1 * m1), Fraction(m2 * m2)
    if kind == 3:  # hierarchical masses
        return sign * a, b, b * tiny
    if kind == 4:  # small momentum, unequal and equal masses
        return sign * tiny, a, rng.choice([a, b])
    if kind == 5:  # large momentum
        return sign / tiny, a, b
    if kind == 6:  # massless line, on shell and near it
        return a * (1 + sign * rng.choice([Fraction(0), tiny])), Fraction(0), a
    if kind == 7:  # both massless, or zero momentum
        return rng.choice([(sign * a, Fraction(0), Fraction(0)), (Fraction(0), a, b)])
    if kind == 8:  # tiny width near threshold
        return (a + b) ** 2 * (1 + sign * tiny), (a * a, -tiny), b * b
    if kind == 9:  # width much larger than the mass, and negative Re m^2
        return sign * a, (sign * b, -1 / tiny), rng.choice([a, (b, -a)])
    if kind == 10:  # nearly equal masses
        return sign * a, b, b * (1 + tiny)
    return sign * a * tiny, (b, -tiny), (b, -2 * tiny)  # small momentum, nearly equal and complex


@dataclass(frozen=True)
class Comparison:
    """How one point came out."""

    status: str
    region: str
    misses: tuple[int, ...]
    agreed_digits: float
    reference_digits: float
    seconds: tuple[float, float]


def compare(point: Kinematics, digits: int) -> Comparison:
    """Evaluate a point both ways."""
    two = TwoPoint(exact_real(point[0]), exact_complex(point[1]), exact_complex(point[2]))
    started = time.perf_counter()
    found = evaluate(Integral.parse("bubble", (1, 1), 4, ORDERS), two, digits=digits).rounded()
    middle = time.perf_counter()
    reference = integrate_feynman(
        two, (1, 1), 4, ORDERS, Conventions(), digits=digits, arithmetic="mpmath"
    )
    ended = time.perf_counter()
    if any(
        abs(found[k] - reference.values[k]) > found.bounds[k] + reference.errors[k] for k in found
    ):  # the estimate of the reference is not proven: let more digits decide
        reference = integrate_feynman(
            two, (1, 1), 4, ORDERS, Conventions(), digits=digits + 20, arithmetic="mpmath"
        )
    misses, agreed, reached = [], math.inf, math.inf
    with mpmath.workdps(digits + 30):
        for k in found:
            distance = abs(found[k] - reference.values[k])
            if distance > found.bounds[k] + reference.errors[k]:
                misses.append(k)
            size = abs(found[k])
            if size and distance:
                agreed = min(agreed, float(-mpmath.log10(distance / size)))
            if size and reference.errors[k]:
                reached = min(reached, float(-mpmath.log10(reference.errors[k] / size)))
    return Comparison(
        found.status,
        found.region,
        tuple(misses),
        agreed,
        reached,
        (middle - started, ended - middle),
    )


def points(count: int, adversarial: int, seed: int) -> list[Kinematics]:
    """Return the points of a campaign."""
    rng = random.Random(seed)
    return [random_point(rng) for _ in range(count)] + [
        adversarial_point(rng) for _ in range(adversarial)
    ]


def main() -> int:
    """Run the campaign and print the figures; return the number of misses."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--random", type=int, default=200)
    parser.add_argument("--adversarial", type=int, default=100)
    parser.add_argument("--digits", type=int, default=40)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=2)
    arguments = parser.parse_args()
    sample = points(arguments.random, arguments.adversarial, arguments.seed)
    with ProcessPoolExecutor(arguments.workers) as pool:
        results = list(pool.map(partial(compare, digits=arguments.digits), sample, chunksize=20))
    misses = [(p, r) for p, r in zip(sample, results, strict=True) if r.misses]
    print(f"points {len(sample)}, orders {ORDERS}, digits {arguments.digits}")
    print("status", dict(Counter(r.status for r in results)))
    print("regions", dict(Counter(r.region for r in results)))
    print(f"points with a missed bound: {len(misses)}")
    for point, result in misses[:20]:
        print("  missed", point, result)
    print(f"worst agreement: {min(r.agreed_digits for r in results):.1f} digits")
    print(f"least accurate reference: {min(r.reference_digits for r in results):.1f} digits")
    print(
        f"closed form {sum(r.seconds[0] for r in results):.1f} s, "
        f"reference {sum(r.seconds[1] for r in results):.1f} s"
    )
    return len(misses)


if __name__ == "__main__":
    raise SystemExit(min(main(), 1))
