"""A long campaign for doubles with proven bounds: every bound against ball arithmetic.

    python -m tests.campaign_arrays --points 200000 --workers 2 --seed 1 [--json OUTPUT.json]
    python -m tests.campaign_arrays --routes --points 10000000

`--points` is for each integral; one point in four is adversarial.  A violation is an error, bounded
from above with 25-digit balls, that exceeds the bound of a value that was not left to balls; it is
printed with everything needed to see it again, and the exit code is 1.  Beside that the table
shows which share of the points was left to balls and the worst error relative to its bound, for
each integral and kind of points.  A point takes about 0.4 ms for each integral and core, so that
10^7 points take 80 minutes.  `tests/test_campaign_arrays.py` runs a small part of the same points.

With `--routes` nothing is compared with balls but the formulas of `loopint.arrays.ends` with those
of `loopint.arrays.masters` (integration by parts and the Gauss rule; for two orders of B(1,1) the
formula with logarithms): where both have a bound, the values may differ by no more than the sum of
the bounds.  That takes microseconds.
"""

from __future__ import annotations

import argparse
import json
import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass, field
from functools import partial

import numpy as np
from flint import acb

from loopint.arrays import bubble
from loopint.arrays.bubble import bubble_doubles
from loopint.arrays.evaluate import Arrays, Tolerance
from loopint.core.conventions import Conventions
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import exact_complex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.registry import Evaluator, Integral

Points = tuple[np.ndarray, np.ndarray, np.ndarray]

INTEGRALS = {
    "B(1,1), -1..0": ((1, 1), (), (-1, 0)),
    "B(1,1), -1..2": ((1, 1), (), (-1, 2)),
    "B(2,1), 0..2": ((2, 1), (), (0, 2)),
    "B(1,2), 0..2": ((1, 2), (), (0, 2)),
    "dB(1,1)/dp^2, 0..2": ((1, 1), "p_squared", (0, 2)),
}
DIGITS = 25
CHUNK = 1000
TOLERANCE = Tolerance.parse(1e-12, "series")


def decades(rng: np.random.Generator, low: float, high: float, count: int) -> np.ndarray:
    """Draw logarithmically."""
    return 10.0 ** rng.uniform(low, high, count)


def signs(rng: np.random.Generator, count: int) -> np.ndarray:
    return rng.choice([-1.0, 1.0], count)


# --- random points ----------------------------------------------------------------------------


def uniform(rng: np.random.Generator, n: int) -> Points:
    return rng.uniform(-50, 50, n), rng.uniform(0.01, 10, n), rng.uniform(0.01, 10, n)


def logarithmic(rng: np.random.Generator, n: int) -> Points:
    p = signs(rng, n) * decades(rng, -3, 3, n)
    return p, decades(rng, -3, 3, n), decades(rng, -3, 3, n)


def hierarchical(rng: np.random.Generator, n: int) -> Points:
    p = signs(rng, n) * decades(rng, -30, 30, n)
    return p, decades(rng, -30, 30, n), decades(rng, -30, 30, n)


def unstable(rng: np.random.Generator, n: int) -> Points:
    """Widths from 1e-8 of the mass to ten times it."""
    p, m1, m2 = uniform(rng, n) if rng.random() < 0.5 else logarithmic(rng, n)
    return p, m1 * (1 - 1j * decades(rng, -8, 1, n)), m2 * (1 - 1j * decades(rng, -8, 1, n))


def one_unstable(rng: np.random.Generator, n: int) -> Points:
    p, m1, m2 = uniform(rng, n) if rng.random() < 0.5 else logarithmic(rng, n)
    return p, m1 + 0j, m2 * (1 - 1j * decades(rng, -8, 1, n))


# --- adversarial points -----------------------------------------------------------------------


def nudged(rng: np.random.Generator, x: np.ndarray) -> np.ndarray:
    """Leave alone, move by a few ulp, or by a relative 1e-16 to 0.1."""
    n = x.size
    steps = rng.integers(-3, 4, n) * np.spacing(np.abs(x))
    relative = x * signs(rng, n) * decades(rng, -16, -1, n)
    return x + np.where(rng.random(n) < 0.3, steps, relative) * (rng.random(n) < 0.95)


def near_thresholds(rng: np.random.Generator, n: int) -> Points:
    """Threshold and pseudothreshold, and where A1, A2, S or p^2 - m^2 vanish."""
    m1 = decades(rng, -2, 2, n)
    m2 = np.where(rng.random(n) < 0.2, m1, decades(rng, -2, 2, n))
    m1, m2 = (m * 10.0 ** rng.choice([0, 0, 0, -8, 8, -20], n) for m in (m1, m2))
    a, b = np.sqrt(m1), np.sqrt(m2)
    special = [(a + b) ** 2, (a - b) ** 2, np.abs(m1 - m2), m1 + m2, m1, m2, -np.abs(m1 - m2)]
    p = np.choose(rng.integers(0, len(special), n), special)
    return nudged(rng, p), m1, m2


def near_boundaries(rng: np.random.Generator, n: int) -> Points:
    """Where one formula gives way to another: sqrt|lambda| = c |A| for the constants in use."""
    m1, m2 = decades(rng, -2, 2, n), decades(rng, -2, 2, n)
    ratio = rng.choice([1 / 7, 1 / 3, 0.75], n)  # lambda = ratio^2 A1^2
    root = np.sqrt(m1 * m2 + 0 * ratio)
    # A1^2 (1 - ratio^2) = 4 p^2 m1^2 with A1 = p^2 + m1^2 - m2^2, solved for p^2
    half = m1 - m2 - 2 * m1 / (1 - ratio**2)
    inside = np.maximum(half * half - (m1 - m2) ** 2, 0.0)
    p = -half + signs(rng, n) * np.sqrt(inside)
    return nudged(rng, np.where(p == 0, root, p)), m1, m2


def small_momentum(rng: np.random.Generator, n: int) -> Points:
    m1 = decades(rng, -2, 2, n)
    near = m1 * (1 + signs(rng, n) * decades(rng, -17, 0, n) * 0.9)
    m2 = np.where(rng.random(n) < 0.5, near, decades(rng, -2, 2, n))
    p = signs(rng, n) * decades(rng, -40, 0, n) * (rng.random(n) < 0.95)
    return p, m1, m2


def massless(rng: np.random.Generator, n: int) -> Points:
    m = decades(rng, -3, 3, n)
    p = nudged(rng, np.where(rng.random(n) < 0.5, m, signs(rng, n) * decades(rng, -3, 3, n)))
    first = rng.random(n) < 0.5
    other = np.where(rng.random(n) < 0.1, 0.0, m)
    return p, np.where(first, 0.0, other), np.where(first, other, 0.0)


def widths(rng: np.random.Generator, n: int) -> Points:
    """Tiny or huge widths at special momenta, equal complex masses, negative Re m^2."""
    p, m1, m2 = near_thresholds(rng, n)
    width1, width2 = decades(rng, -20, 3, n), decades(rng, -20, 3, n)
    kind = rng.integers(0, 5, n)
    m1, m2 = m1 * (1 - 1j * width1), m2 * (1 - 1j * np.where(kind == 0, 0.0, width2))
    m1 = np.where(kind == 1, m2, m1)
    m2 = np.where(kind == 2, -np.conj(m2), m2)
    complex_threshold = ((np.sqrt(m1) + signs(rng, n) * np.sqrt(m2)) ** 2).real
    p = np.where(rng.random(n) < 0.5, nudged(rng, complex_threshold), p * signs(rng, n))
    return p, m1, m2


RANDOM = (uniform, logarithmic, hierarchical, unstable, one_unstable)
ADVERSARIAL = (near_thresholds, near_boundaries, small_momentum, massless, widths)


# --- the comparison ---------------------------------------------------------------------------


@dataclass
class Count:
    """How points of one kind came out."""

    points: int = 0
    balls: int = 0
    checked: int = 0
    worst: float = 0.0
    violations: list[str] = field(default_factory=list)

    def add(self, other: Count) -> None:
        self.points += other.points
        self.balls += other.balls
        self.checked += other.checked
        self.worst = max(self.worst, other.worst)
        self.violations += other.violations


def distance_up(ball: acb, value: complex) -> float:
    """Return an upper bound on |true - value|."""
    gap = acb(ball) - acb(value.real, value.imag)
    return 0.0 if gap == 0 else float(abs(gap).upper())


def check(name: str, points: Points) -> Count:
    """Evaluate points in doubles and compare every coefficient with balls."""
    powers, derivatives, orders = INTEGRALS[name]
    integral = Integral.parse("bubble", powers, 4, orders, derivatives)
    conventions = Conventions()
    p, m1, m2 = points
    arrays = bubble_doubles(integral, conventions, points, TOLERANCE)
    count = Count(points=p.size, balls=int(arrays.missing.sum()))
    evaluator = Evaluator(integral, conventions, digits=DIGITS)
    for i in np.flatnonzero(~arrays.missing):
        point = TwoPoint(exact_real(p[i]), exact_complex(m1[i]), exact_complex(m2[i]))
        series = evaluator(point).series
        with working_precision(256):
            for k, values in arrays.values.items():
                bound = float(arrays.bounds[k][i])
                error = distance_up(series[k], complex(values[i]))
                count.checked += 1
                if not error <= bound:
                    where = f"p^2 = {p[i]!r}, m1^2 = {m1[i]!r}, m2^2 = {m2[i]!r}"
                    count.violations.append(
                        f"{name} order {k}: {error:.3g} > {bound:.3g} at {where}"
                    )
                elif bound > 0:
                    count.worst = max(count.worst, error / bound)
    return count


def compare_routes(name: str, points: Points) -> Count:
    """Evaluate points by two sets of formulas; `worst` is the distance over the sum of bounds."""
    powers, derivatives, orders = INTEGRALS[name]
    plan = bubble.recipe(Integral.parse("bubble", powers, 4, orders, derivatives), Conventions())
    assert plan is not None
    n = points[0].size
    first, second = Arrays.empty(orders, n), Arrays.empty(orders, n)
    with_logarithms = orders == (-1, 0) and not np.iscomplexobj(points[1])
    other = bubble._fill_with_logarithms if with_logarithms else bubble._fill_general
    with np.errstate(all="ignore"):
        for arrays, fill in ((first, bubble._fill_by_ends), (second, other)):
            fill(arrays, plan, np.arange(n), points, 0.0, TOLERANCE)
    both = np.flatnonzero(~(first.missing | second.missing))
    count = Count(points=n, balls=n - both.size)
    for k in range(max(orders[0], 0), orders[1] + 1):
        gap = np.abs(first.values[k][both] - second.values[k][both]) * (1 - 2.0**-50)
        allowed = first.bounds[k][both] + second.bounds[k][both]
        count.checked += both.size
        with np.errstate(all="ignore"):
            count.worst = max(count.worst, float(np.nanmax(gap / allowed, initial=0.0)))
        for i in both[~(gap <= allowed)]:
            where = ", ".join(repr(array[i]) for array in points)
            count.violations.append(f"{name} order {k}: two routes disagree at {where}")
    return count


def tasks(total: int, seed: int, chunk: int = CHUNK) -> Iterator[tuple[str, str, int, int]]:
    """Name the chunks: integral, kind of points, their number, seed."""
    number = 0
    for name in INTEGRALS:
        for kinds, share in ((RANDOM, 0.75), (ADVERSARIAL, 0.25)):
            for kind in kinds:
                left = round(total * share / len(kinds))
                while left > 0:
                    yield name, kind.__name__, min(left, chunk), seed * 10**6 + number
                    left -= chunk
                    number += 1


def run(task: tuple[str, str, int, int], routes: bool = False) -> tuple[str, str, Count]:
    """Do one chunk."""
    name, kind, count, seed = task
    generate: Callable[[np.random.Generator, int], Points] = globals()[kind]
    points = generate(np.random.default_rng(seed), count)
    return name, kind, (compare_routes if routes else check)(name, points)


def main() -> int:
    """Run the campaign and print the figures; return 1 if a bound was violated."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--points", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--json", default=None)
    parser.add_argument("--routes", action="store_true", help="two sets of formulas, no balls")
    arguments = parser.parse_args()
    started = time.perf_counter()
    table: dict[tuple[str, str], Count] = defaultdict(Count)
    with ProcessPoolExecutor(arguments.workers) as pool:
        chunks = tasks(arguments.points, arguments.seed, 100 * CHUNK if arguments.routes else CHUNK)
        for name, kind, count in pool.map(partial(run, routes=arguments.routes), chunks):
            table[name, kind].add(count)
    last = "not both" if arguments.routes else "to balls"
    print(f"{'integral':<20} {'points':<17} {'number':>9} {last:>9} {'worst error/bound':>18}")
    for (name, kind), count in table.items():
        share = count.balls / count.points
        print(f"{name:<20} {kind:<17} {count.points:9d} {share:9.2g} {count.worst:18.3f}")
    violations = [line for count in table.values() for line in count.violations]
    total, checked = (sum(getattr(c, x) for c in table.values()) for x in ("points", "checked"))
    print(
        f"{total} points, {checked} coefficients checked, {len(violations)} bounds violated, "
        f"{time.perf_counter() - started:.0f} s"
    )
    for line in violations[:50]:
        print("  " + line)
    if arguments.json:
        rows = [{"integral": n, "kind": k, **asdict(c)} for (n, k), c in table.items()]
        with open(arguments.json, "w", encoding="utf-8") as stream:
            json.dump(rows, stream, indent=2)
    return min(len(violations), 1)


if __name__ == "__main__":
    raise SystemExit(main())
