"""The special functions of the printed formulas that mpmath does not have.

Only mpmath is used: the source of these functions is copied into printed Python modules.
"""

from __future__ import annotations

from typing import Any

import mpmath


def nielsen_polylogarithm(n: int, p: int, z: Any) -> Any:  # noqa: ANN401 - an mpmath number
    """Return S_{n,p}(z) = (-1)^(n+p-1)/((n-1)! p!) Int_0^1 log(t)^(n-1) log(1-z t)^p dt/t."""
    z = mpmath.mpmathify(z)
    if z == 0:
        return mpmath.mpf(0)
    if p == 1:
        return mpmath.polylog(n + 1, z)
    with mpmath.extraprec(20):

        def integrand(t: Any) -> Any:  # noqa: ANN401
            return mpmath.log(t) ** (n - 1) * mpmath.log1p(-z * t) ** p / t

        size = abs(z)
        points = [0, 1 / size, 1] if size > 1 else [0, 1]
        weight = mpmath.factorial(n - 1) * mpmath.factorial(p)
        value = (-1) ** (n + p - 1) * mpmath.quad(integrand, points) / weight
    return +value


def log_sine(j: int, theta: Any) -> Any:  # noqa: ANN401
    """Return Ls_j(theta) = -Int_0^theta log(2 sin(t/2))^(j-1) dt for 0 <= theta <= 2 pi."""
    theta = mpmath.mpmathify(theta)
    if j == 1:
        return -theta
    if j == 2:
        return mpmath.clsin(2, theta)
    with mpmath.extraprec(20):

        def integrand(t: Any) -> Any:  # noqa: ANN401
            return mpmath.log(2 * mpmath.sin(t / 2)) ** (j - 1)

        points = [0, mpmath.pi, theta] if theta > mpmath.pi else [0, theta]
        value = -mpmath.quad(integrand, points)
    return +value


def clausen2(theta: Any) -> Any:  # noqa: ANN401
    """Return Clausen's function Cl_2(theta) = sum_{k>=1} sin(k theta)/k^2."""
    return mpmath.clsin(2, theta)
