"""Sympy functions of the closed forms: Nielsen polylogarithms, log-sine and Clausen functions.

Each is evaluated by mpmath: `expr.evalf(...)` and `sympy.lambdify(..., "mpmath")` work on it.
"""

from __future__ import annotations

from typing import Any

import mpmath
import sympy

from loopint.formulas import special


def _evaluated(function: Any, arguments: tuple[Any, ...], precision: int) -> Any:  # noqa: ANN401
    values = [argument._to_mpmath(precision) for argument in arguments]
    with mpmath.workprec(precision + 10):
        value = function(*values)
    return sympy.Expr._from_mpmath(value, precision)


class NielsenS(sympy.Function):  # type: ignore[misc] # sympy has no types
    """Nielsen's generalised polylogarithm S_{n,p}(z), with S_{n,1} = Li_{n+1}.

    S_{n,p}(z) = (-1)^(n+p-1)/((n-1)! p!) Int_0^1 log(t)^(n-1) log(1-z t)^p dt/t
    (K. S. Kölbig, SIAM J. Math. Anal. 17 (1986) 1232), real for real z <= 1.

    Examples
    --------
    S_{1,2}(1) = zeta(3):

    >>> NielsenS(1, 2, 1)
    zeta(3)
    >>> print(NielsenS(1, 2, sympy.Rational(1, 2)).evalf(12))
    0.0947530042301
    """

    nargs = 3

    # sympy's hook: it gets expressions that the formulas build, never text of a user
    @classmethod
    def eval(cls, n: Any, p: Any, z: Any) -> Any:  # noqa: ANN401
        """Reduce p = 1 to polylogarithms, and the values at 0 and (n = 1) at 1."""
        if z.is_zero:
            return sympy.S.Zero
        if p == 1:
            return sympy.polylog(n + 1, z)
        if n == 1 and z == 1:
            return sympy.zeta(p + 1)  # Int_0^1 (-log(1-t))^p dt/t = p! zeta(p+1)
        return None

    def fdiff(self, argindex: int = 3) -> Any:  # noqa: ANN401
        """Return the derivative with respect to z."""
        n, p, z = self.args
        if argindex != 3:
            raise sympy.function.ArgumentIndexError(self, argindex)
        if n == 1:
            return (-sympy.log(1 - z)) ** p / sympy.factorial(p) / z
        return NielsenS(n - 1, p, z) / z

    def _eval_evalf(self, prec: int) -> Any:  # noqa: ANN401
        n, p, z = self.args
        if not z.is_number:
            return None
        return _evaluated(lambda x: special.nielsen_polylogarithm(int(n), int(p), x), (z,), prec)

    def _latex(self, printer: Any) -> str:  # noqa: ANN401
        n, p, z = map(printer._print, self.args)
        return rf"S_{{{n},{p}}}\left({z}\right)"

    @staticmethod
    def _imp_(n: Any, p: Any, z: Any) -> Any:  # noqa: ANN401
        return special.nielsen_polylogarithm(int(n), int(p), z)


class log_sine(sympy.Function):  # type: ignore[misc] # noqa: N801 - sympy names functions so
    """Log-sine function Ls_j(theta) = -Int_0^theta log(2 sin(t/2))^(j-1) dt, 0 <= theta <= 2 pi.

    Ls_2 is Clausen's function Cl_2 (L. Lewin, Polylogarithms and Associated Functions, 1981).

    Examples
    --------
    >>> log_sine(2, sympy.Symbol("theta"))
    clausen2(theta)
    """

    nargs = 2

    # sympy's hook: it gets expressions that the formulas build, never text of a user
    @classmethod
    def eval(cls, j: Any, theta: Any) -> Any:  # noqa: ANN401
        """Reduce j = 1 and j = 2."""
        if j == 1:
            return -theta
        if j == 2:
            return clausen2(theta)
        return sympy.S.Zero if theta.is_zero else None

    def _eval_evalf(self, prec: int) -> Any:  # noqa: ANN401
        j, theta = self.args
        if not theta.is_number:
            return None
        return _evaluated(lambda x: special.log_sine(int(j), x), (theta,), prec)

    def _latex(self, printer: Any) -> str:  # noqa: ANN401
        j, theta = map(printer._print, self.args)
        return rf"\mathrm{{Ls}}_{{{j}}}\left({theta}\right)"

    @staticmethod
    def _imp_(j: Any, theta: Any) -> Any:  # noqa: ANN401
        return special.log_sine(int(j), theta)


class clausen2(sympy.Function):  # type: ignore[misc] # noqa: N801
    """Clausen's function Cl_2(theta) = sum_{k>=1} sin(k theta)/k^2.

    Examples
    --------
    Catalan's constant (DLMF 25.11.40):

    >>> clausen2(sympy.pi / 2)
    Catalan
    """

    nargs = 1

    # sympy's hook: it gets expressions that the formulas build, never text of a user
    @classmethod
    def eval(cls, theta: Any) -> Any:  # noqa: ANN401
        """Reduce the multiples of pi and pi/2."""
        if theta.is_zero or theta in {sympy.pi, 2 * sympy.pi}:
            return sympy.S.Zero
        return sympy.S.Catalan if theta == sympy.pi / 2 else None

    def _eval_evalf(self, prec: int) -> Any:  # noqa: ANN401
        (theta,) = self.args
        return _evaluated(special.clausen2, (theta,), prec) if theta.is_number else None

    def _latex(self, printer: Any) -> str:  # noqa: ANN401
        return rf"\mathrm{{Cl}}_2\left({printer._print(self.args[0])}\right)"

    @staticmethod
    def _imp_(theta: Any) -> Any:  # noqa: ANN401
        return special.clausen2(theta)
