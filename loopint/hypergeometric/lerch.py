"""Lerch's transcendent Phi(z, s, a) for a = a0 + a1 eps, expanded in epsilon.

From Phi(z, s, a) = sum_n z^n/(n+a)^s (DLMF 25.14.1), d/da Phi(z, s, a) = -s Phi(z, s+1, a), so

    Phi(z, s, a0 + a1 eps) = sum_k (s)_k/k! (-a1 eps)^k Phi(z, s+k, a0),

for all z to which both sides continue.  The values are FLINT's balls.
"""

from __future__ import annotations

from flint import acb, arb, fmpq

from loopint.core.laurent import BallSeries
from loopint.core.numbers import Ball, ExactComplex
from loopint.core.time_limit import check_time


def lerch_phi_series(z: ExactComplex, s: int, a0: fmpq, a1: fmpq, terms: int) -> BallSeries:
    """Expand Phi(z, s, a0 + a1 eps) to `terms` orders at the working precision.

    Parameters
    ----------
    z
        Any number but 1; on the cut z > 1 the value is the one at z + i0.
    s
        Positive integer.
    a0, a1
        a0 is not an integer <= 0.

    Examples
    --------
    Phi(1/2, 1, 1) = 2 log 2 (DLMF 25.14.3 with Li_1):

    >>> from loopint.core.numbers import exact_complex
    >>> value = lerch_phi_series(exact_complex("1/2"), 1, fmpq(1), fmpq(0), 1)[0]
    >>> value.overlaps(2 * arb.const_log2())
    True
    """
    on_cut = z.is_real and z.re > 1
    point = acb(z.ball())
    first = arb(a0)
    result: list[Ball] = []
    weight = fmpq(1)  # (s)_k (-a1)^k / k!
    for k in range(terms):
        check_time()
        if weight == 0:
            result.append(arb(0))
        else:
            value = point.lerch_phi(s + k, first)
            if on_cut:  # FLINT, like DLMF, is continuous from below the cut
                value = value.conjugate()
            result.append(weight * (value.real if z.is_real and not on_cut else value))
        weight = weight * (s + k) * (-a1) / (k + 1)
    return BallSeries(0, result)
