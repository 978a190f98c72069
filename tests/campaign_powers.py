"""A long campaign over families, powers, dimensions and kinematics, against mpmath.

    python -m tests.campaign_powers --count 5000 --digits 30

Each integral is expanded through eps^10 to 45 digits and summed at eps = 10^-4, where mpmath
evaluates the published formula or the Feynman-parameter integral (tests/test_bubble_powers.py,
tests/test_propagator.py).  The orders lowest..3 at the digits asked for must enclose the first
expansion.  A miss is a failure of either; the mpmath value decides.
"""

from __future__ import annotations

import argparse
import random
import time
from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from fractions import Fraction
from functools import partial

import mpmath

import loopint
from tests import test_bubble_powers as powers
from tests import test_propagator as propagators
from tests.reference import at_epsilon, to_mp

EPSILON = Fraction(1, 10_000)
RATES = [Fraction(1), Fraction(1, 2), Fraction(2), Fraction(-1, 3)]


@dataclass(frozen=True)
class Drawn:
    """One integral at one point."""

    family: str
    kind: str
    kinematics: tuple[object, ...]
    powers: object
    dimension: int
    measure: str = "msbar"


@dataclass(frozen=True)
class Outcome:
    """How one integral came out."""

    status: str
    method: str
    miss: bool
    error: float
    seconds: float


def draw(seed: int) -> Drawn:
    """Draw a tadpole, a bubble or a propagator-type integral."""
    rng = random.Random(seed)
    family = rng.choice(["tadpole", "bubble", "bubble", "bubble", "propagator", "propagator"])
    if family == "tadpole":
        mass: object = Fraction(rng.randint(1, 200), 20)
        if rng.random() < 0.4:
            mass = (mass, -Fraction(rng.randint(1, 100), 20))
        return Drawn(family, "massive", (mass,), rng.randint(1, 7), rng.randint(1, 12))
    if family == "bubble":
        kind = rng.choice(powers.KINDS)
        kinematics = powers.draw(rng, kind)
        return Drawn(
            family, kind, kinematics, (rng.randint(1, 6), rng.randint(1, 6)), rng.randint(1, 12)
        )
    kind = rng.choice(propagators.KINDS)
    lowest = 1 if kind in {"general", "equal_mass", "complex", "massless_at_zero"} else -1
    pair = (
        (rng.randint(lowest, 4), rng.choice([Fraction(0), *RATES])),
        (rng.randint(lowest, 4), rng.choice(RATES)),
    )
    return Drawn(family, kind, propagators.draw(rng, kind), pair, rng.randint(1, 8))


def reference(drawn: Drawn, e: mpmath.mpf) -> mpmath.mpc:
    """Evaluate the integral at eps = e in mpmath."""
    half = mpmath.mpf(drawn.dimension) / 2 - e
    measure = mpmath.exp(mpmath.euler * e)
    values = [mpmath.mpmathify(to_mp(x)) for x in drawn.kinematics]
    if drawn.family == "tadpole":
        n = int(drawn.powers)  # type: ignore[call-overload]
        gamma = mpmath.gamma(n - half) / mpmath.gamma(n)
        return (-1) ** n * measure * gamma * values[0] ** (half - n)
    first, second = drawn.powers  # type: ignore[misc]
    if drawn.family == "bubble":
        s = half - first - second
        integral = powers.feynman_integral(*values, first - 1, second - 1, s, drawn.kind)
        gamma = mpmath.gamma(-s) / mpmath.gamma(first) / mpmath.gamma(second)
        return (-1) ** (first + second) * measure * gamma * integral
    nu1, nu2 = (n + to_mp(a) * e for n, a in (first, second))
    value = propagators.published(drawn.kind, *drawn.kinematics, nu1, nu2, half)
    return measure * mpmath.exp(-1j * mpmath.pi * (nu1 + nu2)) * value


def compare(seed: int, digits: int) -> Outcome:
    """Evaluate one drawn integral both ways."""
    drawn = draw(seed)
    function = getattr(loopint, drawn.family)
    started = time.perf_counter()
    try:
        few = function(
            *drawn.kinematics,
            drawn.powers,
            dimension=drawn.dimension,
            orders=(-3, 3),
            digits=digits,
        )
        seconds = time.perf_counter() - started
        many = function(
            *drawn.kinematics, drawn.powers, dimension=drawn.dimension, orders=(-3, 10), digits=45
        )
    except loopint.LoopintError as error:
        return Outcome(type(error).__name__, str(error)[:60], False, 0.0, 0.0)
    with mpmath.workdps(60):
        e = to_mp(EPSILON)
        expected = reference(drawn, e)
        total = at_epsilon(many, e)
        cut = max(abs(many[k]) for k in range(8, 11)) * 1000 * e**11  # the next coefficient
        distance = abs(total - expected)
        allowed = cut + mpmath.mpf(10) ** -36 * max(
            abs(expected), abs(many[0]), abs(many[3]) * e**3
        )
        miss = bool(distance > allowed)
        for k in few:
            miss = miss or bool(abs(few[k] - many[k]) > few.bounds[k] + many.bounds[k])
        error = float(distance / abs(expected)) if expected else float(distance)
    return Outcome(few.status, few.method, miss, error, seconds)


def main() -> int:
    """Run the campaign and print the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--count", type=int, default=300)
    parser.add_argument("--digits", type=int, default=30)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--workers", type=int, default=2)
    arguments = parser.parse_args()
    seeds = range(arguments.seed, arguments.seed + arguments.count)
    with ProcessPoolExecutor(arguments.workers) as pool:
        results = list(pool.map(partial(compare, digits=arguments.digits), seeds, chunksize=10))
    missed = [(seed, r) for seed, r in zip(seeds, results, strict=True) if r.miss]
    print(f"integrals {len(results)}, digits {arguments.digits}")
    print("status", dict(Counter(r.status for r in results)))
    print("method", dict(Counter(r.method for r in results)))
    print(f"misses: {len(missed)}")
    for seed, result in missed[:20]:
        print("  missed", draw(seed), result)
    print(f"median time {sorted(r.seconds for r in results)[len(results) // 2] * 1e3:.2f} ms")
    print(f"slowest {max(r.seconds for r in results):.2f} s")
    return len(missed)


if __name__ == "__main__":
    raise SystemExit(min(main(), 1))
