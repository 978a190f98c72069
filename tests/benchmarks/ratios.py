"""How long evaluations take relative to others, with the accuracy of each side beside its time.

Run it with `python tests/benchmarks/ratios.py [OUTPUT.json]`.  Both sides of a ratio are timed in
turn in one process on one core; the table shows median, smallest and largest ratio of several
repeats.  Times on different machines, or of different runs, are not comparable; the ratios are.
"""

from __future__ import annotations

import json
import math
import statistics
import sys
import time
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING

import mpmath
import numpy as np
from flint import acb, arb
from scipy.special import spence

from loopint import bubble, bubble_array
from loopint.arrays.bubble import bubble_doubles
from loopint.arrays.evaluate import Tolerance
from loopint.core.conventions import Conventions
from loopint.core.kinematics import TwoPoint
from loopint.core.numbers import ExactComplex, exact_real
from loopint.core.precision import working_precision
from loopint.integrals.registry import Evaluator, Integral

if TYPE_CHECKING:
    from collections.abc import Callable

COUNT = 10**6
BALL_POINTS = [("0.7", "1", "1.3"), ("-2.1", "0.4", "1.9"), ("9.3", "1.1", "2.3")]


@dataclass(frozen=True)
class Row:
    """How many times longer the other side takes."""

    work: str
    other: str
    median: float
    smallest: float
    largest: float
    note: str


def compare(
    work: str,
    other: str,
    ours: Callable[[], object],
    theirs: Callable[[], object],
    repeats: int,
    note: str = "",
    loops: int = 1,
) -> Row:
    """Time both sides in turn, `loops` of ours against one of theirs."""
    ours(), theirs()
    ratios = []
    for _ in range(repeats):
        start = time.perf_counter()
        for _ in range(loops):
            ours()
        middle = time.perf_counter()
        theirs()
        end = time.perf_counter()
        ratios.append((end - middle) / ((middle - start) / loops))
    median = statistics.median(ratios)
    note = note.replace("{}", f"{1 / median:.2f}")
    row = Row(work, other, median, min(ratios), max(ratios), note)
    show(row)
    return row


def show(row: Row) -> None:
    print(
        f"{row.work:<34} {row.other:<34} {row.median:9.3g} {row.smallest:9.3g} "
        f"{row.largest:9.3g}  {row.note}",
        flush=True,
    )


# --- (a) balls against other arbitrary-precision evaluations ----------------------------------


def gamma_ratio(epsilon: mpmath.mpf) -> mpmath.mpf:
    """eps Gamma(eps) exp(gamma_E eps)."""
    return mpmath.gamma(1 + epsilon) * mpmath.exp(mpmath.euler * epsilon)


def closed_form(point: tuple[str, str, str], epsilon: mpmath.mpf) -> mpmath.mpc:
    """Int Q^(-eps) dx from Gauss functions at the two ends, in mpmath.

    Primitive from the nearer root of Q at each end; see `loopint.integrals.quadratic`.
    """
    p, m1, m2 = map(mpmath.mpf, point)
    size = (p - m1 - m2) ** 2 - 4 * m1 * m2
    root = mpmath.sqrt(mpmath.mpc(size))
    total = mpmath.mpc(0)
    signs = []
    for index, (m, a) in enumerate(((m1, p + m1 - m2), (m2, p - m1 + m2))):
        sigma = (1 if a > 0 else -1) if size > 0 else (1, -1)[index]
        signs.append(sigma)
        d = a + sigma * root
        w = 4 * p * m / d**2
        total += 2 * m / d * m**-epsilon * mpmath.hyp2f1(1, epsilon, 2 - epsilon, w)
    total /= 1 - epsilon
    if signs[0] == signs[1]:
        height = -size / p
        logarithm = mpmath.log(abs(height)) - (mpmath.mpc(0, mpmath.pi) if height < 0 else 0)
        beta = mpmath.gamma(1 - epsilon) ** 2 / mpmath.gamma(2 - 2 * epsilon)
        total += signs[0] * root / p * mpmath.exp(-epsilon * logarithm) * beta
    return total


def mpmath_taylor(digits: int, highest: int) -> list[list[mpmath.mpc]]:
    """Orders -1..highest by numerical differentiation of the closed form in eps."""
    with mpmath.workdps(digits + 5):
        return [
            mpmath.taylor(lambda e, q=point: gamma_ratio(e) * closed_form(q, e), 0, highest + 1)
            for point in BALL_POINTS
        ]


def mpmath_logarithms(digits: int) -> list[list[mpmath.mpc]]:
    """Orders -1..0 by the textbook formula with logarithms."""
    found = []
    with mpmath.workdps(digits + 5):
        for point in BALL_POINTS:
            p, m1, m2 = map(mpmath.mpf, point)
            s = p - m1 - m2
            size = s * s - 4 * m1 * m2
            root = mpmath.sqrt(mpmath.mpc(size))
            half = mpmath.log(m1 * m2) / 2 + (m1 - m2) / (2 * p) * mpmath.log(m1 / m2)
            y = (s + root) / (s - root)
            logarithm = mpmath.log(abs(y)) if size > 0 else mpmath.log(y)
            if s > 0:
                logarithm -= mpmath.mpc(0, 2 * mpmath.pi)
            found.append([mpmath.mpf(1), 2 - half - root / (2 * p) * logarithm])
    return found


def mpmath_quadrature(digits: int, highest: int) -> list[list[mpmath.mpc]]:
    """Orders -1..highest by mpmath.quad of powers of log Q."""
    found = []
    with mpmath.workdps(digits + 5):
        for point in BALL_POINTS:
            p, m1, m2 = map(mpmath.mpf, point)
            size = (p - m1 - m2) ** 2 - 4 * m1 * m2
            cuts = [mpmath.mpf(0), mpmath.mpf(1)]
            if size > 0 and p > m1 + m2:
                root = mpmath.sqrt(size)
                cuts[1:1] = sorted((p - m1 + m2 + sign * root) / (2 * p) for sign in (-1, 1))

            def logarithm(x, p=p, m1=m1, m2=m2):
                q = x * m1 + (1 - x) * m2 - x * (1 - x) * p
                value = mpmath.log(abs(q)) if q != 0 else mpmath.mpf(0)
                return value - (mpmath.mpc(0, mpmath.pi) if q < 0 else 0)

            moments = [
                mpmath.quad(lambda x, k=k: (-logarithm(x)) ** k, cuts) / mpmath.factorial(k)
                for k in range(highest + 2)
            ]
            gamma = mpmath.taylor(gamma_ratio, 0, highest + 1)
            found.append(
                [
                    mpmath.fsum(gamma[k - j] * moments[j] for j in range(k + 1))
                    for k in range(highest + 2)
                ]
            )
    return found


def flint_scalar(digits: int, highest: int) -> None:
    """The same Gauss functions by python-flint on a small circle of eps, a point per order."""
    orders = highest + 2
    radius_bits = max(8, math.ceil(digits * 3.33 / orders))  # aliasing radius^orders
    with working_precision(math.ceil(digits * 3.33) + 20 + orders * radius_bits):
        for point in BALL_POINTS:
            p, m1, m2 = map(arb, point)
            size = acb((p - m1 - m2) ** 2 - 4 * m1 * m2)
            root = size.sqrt()
            for n in range(orders):
                epsilon = acb(arb(2 * n) / orders).exp_pi_i() * arb(2) ** -radius_bits
                for index, (m, a) in enumerate(((m1, p + m1 - m2), (m2, p - m1 + m2))):
                    sigma = (1 if a > 0 else -1) if size.real > 0 else (1, -1)[index]
                    d = a + sigma * root
                    w = 4 * p * m / d**2
                    value = w.hypgeom_2f1(acb(1), epsilon, 2 - epsilon)
                    _ = 2 * m / d * acb(m) ** -epsilon * value / (1 - epsilon)


def ball_digits(found: list[list[mpmath.mpc]], digits: int, highest: int) -> str:
    """Compare the other side with proven values; returns its worst number of digits."""
    worst = math.inf
    for point, coefficients in zip(BALL_POINTS, found, strict=True):
        exact = bubble(*point, orders=(-1, highest), digits=digits + 20)
        with mpmath.workdps(digits + 20):
            for k in range(-1, highest + 1):
                gap = abs(coefficients[k + 1] - exact[k]) / abs(exact[k])
                worst = min(worst, float(-mpmath.log10(gap)) if gap else math.inf)
    return f"other side: {min(worst, digits + 10):.0f} digits, no bound; ours: {digits}, proven"


def ball_rows() -> list[Row]:
    rows = []
    for digits in (16, 30, 50, 100):
        for highest in (0, 3):
            integral = Integral.parse("bubble", (1, 1), 4, (-1, highest))
            evaluator = Evaluator(integral, digits=digits)

            def ours(evaluator=evaluator) -> None:
                for p, m1, m2 in BALL_POINTS:
                    masses = ExactComplex(exact_real(m1)), ExactComplex(exact_real(m2))
                    evaluator(TwoPoint(exact_real(p), *masses))

            work = f"balls, {digits} digits, -1..{highest}"
            options = {"repeats": 3, "loops": 5}
            if highest == 0:
                note = ball_digits(mpmath_logarithms(digits), digits, 0)
                theirs = lambda digits=digits: mpmath_logarithms(digits)  # noqa: E731
                rows.append(compare(work, "mpmath, logarithms", ours, theirs, note=note, **options))
            else:
                note = ball_digits(mpmath_taylor(digits, highest), digits, highest)
                theirs = lambda digits=digits: mpmath_taylor(digits, 3)  # noqa: E731
                rows.append(
                    compare(work, "mpmath, Gauss functions", ours, theirs, note=note, **options)
                )
            theirs = lambda digits=digits, highest=highest: flint_scalar(digits, highest)  # noqa: E731
            rows.append(
                compare(work, "python-flint 2F1, scalar", ours, theirs, note="ends only", **options)
            )
            if digits <= 50:
                note = ball_digits(mpmath_quadrature(digits, highest), digits, highest)
                theirs = lambda digits=digits, highest=highest: mpmath_quadrature(digits, highest)  # noqa: E731
                options = {"repeats": 2, "loops": 3}
                rows.append(compare(work, "mpmath, quadrature", ours, theirs, note=note, **options))
    return rows


# --- (b) doubles against hand-written NumPy ---------------------------------------------------


def textbook(p: np.ndarray, m1: np.ndarray, m2: np.ndarray) -> np.ndarray:
    """The finite part as written by hand: real logarithms, branches by index, no bounds.

    2 - log(m1 m2) - (m1^2-m2^2)/(2p^2) log(m1^2/m2^2) - R/p^2 * logarithm or arctangent.
    """
    s = p - m1 - m2
    size = s * s - 4 * m1 * m2
    root = np.sqrt(np.abs(size))
    log1, log2 = np.log(m1), np.log(m2)
    result = np.empty(p.shape, dtype=complex)
    real = 2 - 0.5 * (log1 + log2) - (m1 - m2) / (2 * p) * (log1 - log2)
    below = np.flatnonzero(size < 0)
    rest = np.flatnonzero(size >= 0)
    last = np.empty_like(p)
    last[below] = np.arctan2(root[below], -s[below])
    s_rest = s[rest]
    last[rest] = np.copysign(
        np.log((np.abs(s_rest) + root[rest]) / (2 * np.sqrt((m1 * m2)[rest]))), s_rest
    )
    factor = root / p
    result.real = real - factor * last
    result.imag = np.where((size > 0) & (s > 0), np.pi * factor, 0)
    return result


def textbook_complex(p: np.ndarray, m1: np.ndarray, m2: np.ndarray) -> np.ndarray:
    """The same formula in complex arithmetic, as it is usually written."""
    s = (p - m1 - m2).astype(complex)
    root = np.sqrt(s * s - 4 * m1 * m2)
    real = 2 - 0.5 * np.log(m1 * m2) - (m1 - m2) / (2 * p) * np.log(m1 / m2)
    logarithm = np.log((root - s) / (2 * np.sqrt(m1 * m2)))  # on the cut: from above
    return real + root / p * logarithm


def with_spence(p: np.ndarray, m1: np.ndarray, m2: np.ndarray) -> np.ndarray:
    """Int log^2 Q/2 dx for p^2 < 0 by elementary integration and scipy.special.spence."""
    s = p - m1 - m2
    root = np.sqrt(s * s - 4 * m1 * m2)
    a, b = (p - m1 + m2 - root) / (2 * p), (p - m1 + m2 + root) / (2 * p)
    la, lb, level = np.log(1 - 1 / a), np.log(1 - 1 / b), np.log(m2)
    one_a, one_b = -(a - 1) * la - 1, -(b - 1) * lb - 1
    two_a = -(a - 1) * (la * la - 2 * la + 2) + 2 * a
    two_b = -(b - 1) * (lb * lb - 2 * lb + 2) + 2 * b
    gap = a - b
    inner = np.log(gap / a) * lb - spence((a - 1) / gap) + spence(a / gap)
    mixed = (1 - a) * (la - 1) * lb - (one_a - 1) + gap * (inner - lb)
    return 0.5 * level**2 + level * (one_a + one_b) + 0.5 * (two_a + two_b) + mixed


def random_points(kind: str, count: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Uniform or logarithmic; spacelike, or of both signs."""
    rng = np.random.default_rng(2024)
    if kind == "uniform":
        return rng.uniform(-50, 50, count), *rng.uniform(0.01, 10, (2, count))
    p, m1, m2 = 10 ** rng.uniform(-3, 3, (3, count))
    return (-p if kind == "spacelike" else p * rng.choice([-1, 1], count)), m1, m2


def order_one_errors() -> str:
    """Say how far the formula with spence is from proven values."""
    points = random_points("spacelike", 1000)
    result = bubble_array(*points, orders=(-1, 1))
    errors = np.abs(with_spence(*points) + np.pi**2 / 12 - result[1])
    worst = result.bounds[1].max()
    return f"other side errs by up to {errors.max():.0e}, ours proven within {worst:.0e}"


def double_rows() -> list[Row]:
    rows = []
    for kind in ("uniform", "logarithmic"):
        points = random_points(kind, COUNT)
        for orders in ((-1, 0), (-1, 2)):
            share = bubble_array(*points, orders=orders).fallback.mean()
            rows.append(
                compare(
                    f"doubles, {kind}, {orders[0]}..{orders[1]}",
                    "NumPy, finite part only",
                    lambda points=points, orders=orders: bubble_array(*points, orders=orders),
                    lambda points=points: textbook(*points),
                    repeats=7,
                    note=f"ours/other {{}}; ball path {share:.1e} of 10^6 points",
                )
            )
        rows.append(
            compare(
                f"doubles, {kind}, -1..2",
                "NumPy, complex, finite part only",
                lambda points=points: bubble_array(*points, orders=(-1, 2)),
                lambda points=points: textbook_complex(*points),
                repeats=5,
                note="ours/other {}",
            )
        )
    points = random_points("spacelike", COUNT // 5)
    rows.append(
        compare(
            "doubles, spacelike, -1..1",
            "scipy.special.spence, order 1 only",
            lambda: bubble_array(*points, orders=(-1, 1)),
            lambda: with_spence(*points),
            repeats=7,
            note="ours/other {}; " + order_one_errors(),
        )
    )
    return rows


def ball_shares() -> list[dict[str, object]]:
    """Which share of random points is left to balls, for everything that is vectorised."""
    rng, count = np.random.default_rng(5), COUNT // 5
    kinds = {kind: random_points(kind, count) for kind in ("uniform", "logarithmic")}
    for kind in ("uniform", "logarithmic"):
        p, m1, m2 = kinds[kind]
        width1, width2 = 10 ** rng.uniform(-8, 1, (2, count))
        kinds[f"{kind}, unstable"] = (p, m1 * (1 - 1j * width1), m2 * (1 - 1j * width2))
    wide = 10 ** rng.uniform(-30, 30, (3, count))
    kinds["10^-30..10^30"] = (wide[0] * rng.choice([-1, 1], count), wide[1], wide[2])
    tolerance = Tolerance.parse(1e-12, "series")
    rows = []
    print(f"{'':<20}" + "".join(f"{kind:>23}" for kind in kinds))
    for name, powers, derivatives, orders in (
        ("B(1,1), -1..0", (1, 1), (), (-1, 0)),
        ("B(1,1), -1..2", (1, 1), (), (-1, 2)),
        ("B(2,1), 0..2", (2, 1), (), (0, 2)),
        ("B(1,2), 0..2", (1, 2), (), (0, 2)),
        ("dB(1,1)/dm1^2, 0..2", (1, 1), "m1_squared", (0, 2)),
        ("dB(1,1)/dp^2, 0..2", (1, 1), "p_squared", (0, 2)),
    ):
        integral = Integral.parse("bubble", powers, 4, orders, derivatives)
        row: dict[str, object] = {"integral": name}
        for kind, points in kinds.items():
            missing = bubble_doubles(integral, Conventions(), points, tolerance).missing
            row[kind] = float(missing.mean())
        rows.append(row)
        print(f"{name:<20}" + "".join(f"{row[kind]:23.1e}" for kind in kinds), flush=True)
    return rows


def lost_digits() -> list[dict[str, object]]:
    """Correct digits of the finite part on each side in the regions that cost digits."""
    rng = np.random.default_rng(7)
    m1, m2 = rng.uniform(0.5, 5, (2, 200))
    threshold = (np.sqrt(m1) + np.sqrt(m2)) ** 2
    tiny = 10 ** rng.uniform(-14, -8, 200)
    cases = {
        "general": (rng.uniform(-50, 50, 200), m1, m2),
        "threshold (1 +- 1e-8..1e-14)": (threshold * (1 + tiny * rng.choice([-1, 1], 200)), m1, m2),
        "p^2/m^2 = 1e-8..1e-14": (tiny, m1, m2),
        "p^2/m^2 = 1e-8..1e-14, equal masses": (tiny, m1, m1),
        "m1^2/m2^2 = 1e-8..1e-14": (rng.uniform(-3, 3, 200), m1 * tiny, m2),
    }
    rows = []
    for name, points in cases.items():
        result, plain = bubble_array(*points), textbook(*points)
        digits: dict[str, list[float]] = {"loopint": [], "proven": [], "textbook": []}
        for i, (p, a, b) in enumerate(zip(*points, strict=True)):
            exact = complex(bubble(float(p), float(a), float(b), orders=(0, 0), digits=20)[0])
            scale = max(1.0, abs(exact))
            for side, error in (
                ("loopint", abs(result[0][i] - exact)),
                ("proven", result.bounds[0][i]),
                ("textbook", abs(plain[i] - exact)),
            ):
                digits[side].append(-math.log10(max(error / scale, 1e-17)))
        row: dict[str, object] = {"region": name, "ball_path": float(result.fallback.mean())}
        row |= {side: round(min(values), 1) for side, values in digits.items()}
        rows.append(row)
        print(
            f"{name:<40} loopint {row['loopint']:5} digits (proven {row['proven']}), "
            f"NumPy textbook formula {row['textbook']:5}"
        )
    return rows


def main() -> None:
    """Print the tables; write JSON to the path given."""
    print(f"{'work':<34} {'other side':<34} {'other/ours':>9} {'min':>9} {'max':>9}")
    doubles = double_rows()
    balls = ball_rows()
    print("\nworst digits of the finite part, relative to max(1, |value|)")
    digits = lost_digits()
    print(f"\nshare of {COUNT // 5} random points left to balls, bounds within 1e-12 of the series")
    shares = ball_shares()
    if len(sys.argv) > 1:
        table = {
            "ratios": [asdict(row) for row in doubles + balls],
            "digits": digits,
            "ball_shares": shares,
        }
        with open(sys.argv[1], "w", encoding="utf-8") as stream:
            json.dump(table, stream, indent=2)


if __name__ == "__main__":
    main()
