r"""The bubble B(1,1) in d = 2 - 2 eps and in d = 3 - 2 eps: one function, to all orders.

With Q(x) = x m1^2 + (1-x) m2^2 - x(1-x) p^2 - i0, A1 = p^2 + m1^2 - m2^2, A2 = p^2 - m1^2 + m2^2,
R^2 = lambda, the substitutions that make Q a square of a hyperbolic function,

    d = 2:  p^2 (2x-1) + m1^2 - m2^2 = R coth(theta),       Q = lambda/(4 p^2 sinh^2(theta)),
    d = 3:  p^2 (2x-1) + m1^2 - m2^2 = R cosh(theta),       Q = lambda sinh^2(theta)/(4 p^2),

turn both bubbles into the same integral.  With eta = eps in d = 2 and eta = -eps in d = 3 let

    L = +-eps h^(-eps) Int_{theta(x=0)}^{theta(x=1)} (2 sinh(theta))^(2 eta) dtheta,

h = lambda/p^2 with the upper sign in d = 2, h = lambda/(16 p^2) with the lower one in d = 3.
Then, with euclidean sign,

    B^(2)(1,1) = -2 Gamma(eps) R L/lambda,        B^(3)(1,1) = -Gamma(1/2+eps) L/(eps p).

In t = exp(-2 theta) the integrand is t^(-eta-1) (1-t)^(2 eta), whose primitive is Euler's integral
(DLMF 15.6.1), and the ends of the interval give

    L = sum_i (s_i/2) b_i^(-eps) Phi(t_i)
        - (s_1+s_2)/2 Gamma(1-eta)^2/Gamma(1-2 eta) (-h - i0)^(-eps),
    Phi(t) = 2F1(-eta, -2 eta; 1-eta; t) = 1 - sum_{n,k>=1} (-2)^k eta^(n+k) S_{n,k}(t),

    d = 2:  t_i = (A_i - s_i R)/(A_i + s_i R),              b_i = m_i^2 (1-t_i)^2,
    d = 3:  t_i = (A_i - 2 s_i p m_i)/(A_i + 2 s_i p m_i),  b_i = (A_i + 2 s_i p m_i)^2/(16 p^2),

where the signs s_i are chosen so that |t_i| <= 1 or t_i < 0.  The sum over n, k is the integral
over Nielsen's polylogarithms term by term, so it holds to all orders.  Where theta is imaginary
(d = 2: between the thresholds; d = 3: p^2 < 0) the same integral is one of log-sine functions,

    Int_0^phi (2 sin(psi))^(2 eta) dpsi = -1/2 sum_k (2 eta)^k/k! Ls_(k+1)(2 phi),
    Int_0^pi  (2 sin(psi))^(2 eta) dpsi = pi Gamma(1+2 eta)/Gamma(1+eta)^2

(A. I. Davydychev, hep-ph/9910224), and the angles are those of a triangle with sides p, m1, m2.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import sympy
from flint import fmpq

from loopint.core.gamma_factors import EpsilonFactor
from loopint.formulas.expansion import EPS, Expansion, Expr, expand_factor, exponential
from loopint.formulas.functions import NielsenS, log_sine

if TYPE_CHECKING:
    from collections.abc import Sequence

S = sympy.S
P2, MU2 = sympy.symbols("p_squared mu_squared")
HALF = sympy.Rational(1, 2)
Definition = tuple[Expr, Expr]


def symbol(name: str) -> Expr:
    """Return the symbol of that name."""
    return sympy.Symbol(name)


KALLEN, R, P, BETA = map(symbol, ("kallen", "R", "p", "beta"))
A1, A2, M1, M2 = map(symbol, ("A_1", "A_2", "m1", "m2"))
L_CLOSED = symbol("L")


def l_symbol(order: int) -> Expr:
    """Return the symbol of the coefficient of eps^order in L."""
    return symbol(f"L_{order}")


@dataclass(frozen=True)
class MasterPiece:
    """L in one interval of p^2.

    Attributes
    ----------
    conditions
        Relations that all hold there.
    definitions
        Abbreviations, in order.
    values
        L_0, L_1, ... in these abbreviations.
    closed
        L itself.
    """

    conditions: tuple[Expr, ...]
    definitions: tuple[Definition, ...]
    values: tuple[Expr, ...]
    closed: Expr

    def with_lerch(self, value: Expr) -> MasterPiece:
        """Return the piece with L_1 written by Lerch's function."""
        return replace(self, values=(self.values[0], value, *self.values[2:]))


@dataclass(frozen=True)
class End:
    """One end of the Feynman-parameter interval: weight * base^(-eps) * Phi(argument)."""

    weight: Expr
    base: Expr
    argument: Expr
    label: str


@dataclass(frozen=True)
class Shift:
    """The term -weight * Gamma(1-eta)^2/Gamma(1-2 eta) * height^(-eps), height > 0.

    With `above` the height stands for -height - i0.
    """

    weight: Expr
    height: Expr
    above: bool


@dataclass(frozen=True)
class Angle:
    """An angle phi that contributes -weight * Int_0^phi (2 sin)^(2 eta), and its cosine."""

    weight: Expr
    cosine: Expr
    label: str


def gamma_ratio(pairs: Sequence[tuple[int, int, int]]) -> tuple[EpsilonFactor, Expr]:
    """Return prod Gamma(a + b eps)^k for triples (a, b, k), exactly and as an expression."""
    factor, expression = EpsilonFactor(), S.One
    for a, b, k in pairs:
        one = EpsilonFactor.gamma(fmpq(a), fmpq(b))
        for _ in range(abs(k)):
            factor = factor * one if k > 0 else factor / one
        expression *= sympy.gamma(a + b * EPS) ** k
    return factor, expression


def polylogarithm_piece(
    conditions: tuple[Expr, ...],
    definitions: tuple[Definition, ...],
    ends: Sequence[End],
    shift: Shift | None,
    eta: int,
    count: int,
) -> MasterPiece:
    """Expand L in Nielsen polylogarithms; eta is +1 or -1, the sign of eta/eps."""
    found = list(definitions)
    total = Expansion(0, (S.Zero,) * count)
    closed = S.Zero
    for end in ends:
        if end.argument == 1:  # a massless line in d = 3
            argument: Expr = S.One
            factor, phi = gamma_ratio([(1, -eta, 1), (1, 2 * eta, 1), (1, eta, -1)])
            expanded = expand_factor(factor, count)
        else:
            argument = symbol(f"t{end.label}")
            found.append((argument, end.argument))
            phi = sympy.hyper((-eta * EPS, -2 * eta * EPS), (1 - eta * EPS,), argument)
            expanded = _phi(argument, eta, count)
        logarithm = symbol(f"u{end.label}")
        found.append((logarithm, sympy.log(end.base / MU2)))
        total = total + (exponential(-logarithm, count) * expanded).scaled(end.weight)
        closed += end.weight * sympy.exp(-EPS * logarithm) * phi
    if shift is not None:
        logarithm = symbol("v")
        value = sympy.log(shift.height / MU2)
        found.append((logarithm, value - sympy.I * sympy.pi if shift.above else value))
        factor, ratio = gamma_ratio([(1, -eta, 2), (1, -2 * eta, -1)])
        between = exponential(-logarithm, count) * expand_factor(factor, count)
        total = total + between.scaled(-shift.weight)
        closed -= shift.weight * ratio * sympy.exp(-EPS * logarithm)
    values = tuple(sympy.expand(c) for c in total.terms)
    return MasterPiece(conditions, tuple(found), values, closed)


def _phi(argument: Expr, eta: int, count: int) -> Expansion:
    """Expand 2F1(-eta, -2 eta; 1-eta; t), eta = +-eps."""
    terms = [S.One, S.Zero][:count]
    for order in range(2, count):
        total = sum(((-2) ** k * NielsenS(order - k, k, argument) for k in range(1, order)), S.Zero)
        terms.append(-(eta**order) * total)
    return Expansion(0, tuple(terms))


def log_sine_piece(
    conditions: tuple[Expr, ...],
    definitions: tuple[Definition, ...],
    angles: Sequence[Angle],
    whole: int,
    height: Expr,
    eta: int,
    count: int,
) -> MasterPiece:
    """Expand L in log-sine functions.

    L = eps height^(-eps) [ whole * Int_0^pi - sum weight * Int_0^phi ] (2 sin(psi))^(2 eta) dpsi.
    The closed form counts from pi/2 instead of 0, where Int_phi^(pi/2) is
    2^(2 eta) cos(phi) 2F1(1/2, 1/2-eta; 3/2; cos^2(phi)).
    """
    found = list(definitions)
    logarithm = symbol("v")
    found.append((logarithm, sympy.log(height / MU2)))
    factor, ratio = gamma_ratio([(1, 2 * eta, 1), (1, eta, -2)])
    series = expand_factor(factor, count).scaled(sympy.pi * whole)
    half_turns = sympy.Integer(whole)
    closed = S.Zero
    for angle in angles:
        phi = symbol(f"phi{angle.label}")
        found.append((phi, sympy.acos(angle.cosine)))
        terms = tuple(
            sympy.Integer(2 * eta) ** k / sympy.factorial(k) * log_sine(k + 1, 2 * phi)
            for k in range(count)
        )
        series = series + Expansion(0, terms).scaled(angle.weight / 2)
        half_turns -= angle.weight / 2
        cosine = sympy.cos(phi)
        hyper = sympy.hyper((HALF, HALF - eta * EPS), (3 * HALF,), cosine**2)
        closed += angle.weight * 4 ** (eta * EPS) * cosine * hyper
    closed += half_turns * sympy.pi * ratio
    closed *= EPS * sympy.exp(-EPS * logarithm)
    series = Expansion(1, (exponential(-logarithm, count) * series).terms)
    values = (S.Zero, *(sympy.expand(c) for c in series.terms[: count - 1]))
    return MasterPiece(conditions, tuple(found), values, closed)


def even_general(count: int) -> list[MasterPiece]:
    """Return L in d = 2 for two masses."""
    low, high = (M1 - M2) ** 2, (M1 + M2) ** 2
    heavy, light = symbol("mh_squared"), symbol("ml_squared")
    m1, m2 = symbol("m1_squared"), symbol("m2_squared")
    both = [(A1, P2 + m1 - m2), (A2, P2 - m1 + m2)]
    ah, al = P2 + heavy - light, P2 - heavy + light
    th, tl, t1, t2 = map(symbol, ("th", "tl", "t1", "t2"))
    root = (R, sympy.sqrt(KALLEN))
    below = polylogarithm_piece(
        (sympy.Ne(P2, 0), P2 < low),
        (
            (heavy, sympy.Max(m1, m2)),
            (light, sympy.Min(m1, m2)),
            root,
        ),
        [
            End(HALF, heavy * (1 - th) ** 2, (ah - R) / (ah + R), "h"),
            End(-HALF, light * (1 - tl) ** 2, (al + R) / (al - R), "l"),
        ],
        None,
        1,
        count,
    )
    between = log_sine_piece(
        (low < P2, P2 < high),
        (*both, (R, sympy.sqrt(-KALLEN))),
        [
            Angle(S.One, A1 / (2 * sympy.sqrt(P2) * M1), "1"),
            Angle(S.One, A2 / (2 * sympy.sqrt(P2) * M2), "2"),
        ],
        1,
        -KALLEN / P2,
        1,
        count,
    )
    above = polylogarithm_piece(
        (high < P2,),
        (*both, root),
        [
            End(HALF, m1 * (1 - t1) ** 2, (A1 - R) / (A1 + R), "1"),
            End(HALF, m2 * (1 - t2) ** 2, (A2 - R) / (A2 + R), "2"),
        ],
        Shift(S.One, KALLEN / P2, above=True),
        1,
        count,
    )
    return [below, between, above]


def odd_general(count: int) -> list[MasterPiece]:
    """Return L in d = 3 for two masses."""
    low, high = (M1 - M2) ** 2, (M1 + M2) ** 2
    m1, m2 = symbol("m1_squared"), symbol("m2_squared")
    both = [(A1, P2 + m1 - m2), (A2, P2 - m1 + m2)]
    heavy, light = symbol("mh"), symbol("ml")
    root = (P, sympy.sqrt(P2))
    spacelike = log_sine_piece(
        (P2 < 0,),
        (*both, (P, sympy.sqrt(-P2)), (R, sympy.sqrt(KALLEN))),
        [Angle(S.One, A1 / R, "1"), Angle(S.One, A2 / R, "2")],
        1,
        -KALLEN / (16 * P2),
        -1,
        count,
    )
    below = polylogarithm_piece(
        (0 < P2, P2 < low),
        ((heavy, sympy.Max(M1, M2)), (light, sympy.Min(M1, M2)), root),
        [
            End(HALF, ((P + heavy) ** 2 - light**2) ** 2 / (16 * P2), _odd(heavy, light), "h"),
            End(-HALF, ((P - light) ** 2 - heavy**2) ** 2 / (16 * P2), 1 / _odd(light, heavy), "l"),
        ],
        None,
        -1,
        count,
    )
    ends = [
        End(HALF, ((P + M1) ** 2 - m2) ** 2 / (16 * P2), _odd(M1, M2), "1"),
        End(HALF, ((P + M2) ** 2 - m1) ** 2 / (16 * P2), _odd(M2, M1), "2"),
    ]
    between = polylogarithm_piece(
        (low < P2, P2 < high),
        (root,),
        ends,
        Shift(S.One, -KALLEN / (16 * P2), above=False),
        -1,
        count,
    )
    above = polylogarithm_piece(
        (high < P2,), (root,), ends, Shift(S.One, KALLEN / (16 * P2), above=True), -1, count
    )
    return [spacelike, below, between, above]


def _odd(m: Expr, other: Expr) -> Expr:
    """Return (A - 2 p m)/(A + 2 p m) = ((p-m)^2 - other^2)/((p+m)^2 - other^2), factorised."""
    return (P - m - other) * (P - m + other) / ((P + m + other) * (P + m - other))


def even_equal(count: int) -> list[MasterPiece]:
    """Return L in d = 2 for equal masses; R = p^2 beta."""
    m2 = symbol("m_squared")
    t = symbol("t")
    velocity = (BETA, sympy.sqrt(1 - 4 * m2 / P2))
    ends = [End(S.One, m2 * (1 - t) ** 2, (1 - BETA) / (1 + BETA), "")]
    return [
        polylogarithm_piece(
            (P2 < 0,),
            (velocity,),
            ends,
            Shift(S.One, 4 * m2 - P2, above=False),
            1,
            count,
        ),
        log_sine_piece(
            (0 < P2, P2 < 4 * m2),
            ((BETA, sympy.sqrt(4 * m2 / P2 - 1)),),
            [Angle(sympy.Integer(2), sympy.sqrt(P2 / m2) / 2, "")],
            1,
            4 * m2 - P2,
            1,
            count,
        ),
        polylogarithm_piece(
            (4 * m2 < P2,),
            (velocity,),
            ends,
            Shift(S.One, P2 - 4 * m2, above=True),
            1,
            count,
        ),
    ]


def odd_equal(count: int) -> list[MasterPiece]:
    """Return L in d = 3 for equal masses.

    Below threshold L_1 = -p Int Q^(-1/2) dx with Int Q^(-1/2) dx = 2F1(1/2, 1; 3/2; z)/m
    = lerchphi(z, 1, 1/2)/(2 m), z = p^2/(4 m^2).
    """
    m2, m = symbol("m_squared"), symbol("m")
    root = (P, sympy.sqrt(P2))
    ends = [End(S.One, (P + 2 * m) ** 2 / 16, (P - 2 * m) / (P + 2 * m), "")]
    pieces = [
        log_sine_piece(
            (P2 < 0,),
            ((P, sympy.sqrt(-P2)),),
            [Angle(sympy.Integer(2), -P / sympy.sqrt(4 * m2 - P2), "")],
            1,
            (4 * m2 - P2) / 16,
            -1,
            count,
        ),
        polylogarithm_piece(
            (0 < P2, P2 < 4 * m2),
            (root,),
            ends,
            Shift(S.One, (4 * m2 - P2) / 16, above=False),
            -1,
            count,
        ),
        polylogarithm_piece(
            (4 * m2 < P2,), (root,), ends, Shift(S.One, (P2 - 4 * m2) / 16, above=True), -1, count
        ),
    ]
    lerch = -P / (2 * m) * sympy.lerchphi(P2 / (4 * m2), 1, HALF)
    return _below_by_lerch(pieces, lerch, count)


def even_one_massless(count: int) -> list[MasterPiece]:
    """Return L in d = 2 for m1 = 0, m2 = m; R = p^2 - m^2.

    The massless end, t = 0, is scaleless: it belongs to no power of m^2.
    """
    m2, t = symbol("m_squared"), symbol("t")
    return [
        polylogarithm_piece(
            (sympy.Ne(P2, 0), P2 < m2),
            (),
            [End(-HALF, m2 * (1 - t) ** 2, P2 / m2, "")],
            None,
            1,
            count,
        ),
        polylogarithm_piece(
            (m2 < P2,),
            (),
            [End(HALF, m2 * (1 - t) ** 2, m2 / P2, "")],
            Shift(S.One, (P2 - m2) ** 2 / P2, above=True),
            1,
            count,
        ),
    ]


def odd_one_massless(count: int) -> list[MasterPiece]:
    """Return L in d = 3 for m1 = 0, m2 = m.

    Below threshold L_1 = -p Int Q^(-1/2) dx with Int Q^(-1/2) dx = 2 2F1(1/2, 1; 3/2; z)/m
    = lerchphi(z, 1, 1/2)/m, z = p^2/m^2 (Boos, Davydychev, Theor. Math. Phys. 89 (1991) 1052).
    """
    m2, m = symbol("m_squared"), symbol("m")
    root = (P, sympy.sqrt(P2))
    massive = End(HALF, (P + m) ** 4 / (16 * P2), ((P - m) / (P + m)) ** 2, "")
    height = (P2 - m2) ** 2 / (16 * P2)
    pieces = [
        log_sine_piece(
            (P2 < 0,),
            ((P, sympy.sqrt(-P2)),),
            [Angle(S.One, (P2 + m2) / (m2 - P2), "")],
            0,
            -height,
            -1,
            count,
        ),
        polylogarithm_piece(
            (0 < P2, P2 < m2),
            (root,),
            [massive, End(-HALF, height, S.One, "0")],
            None,
            -1,
            count,
        ),
        polylogarithm_piece(
            (m2 < P2,),
            (root,),
            [massive, End(HALF, height, S.One, "0")],
            Shift(S.One, height, above=True),
            -1,
            count,
        ),
    ]
    lerch = -P / m * sympy.lerchphi(P2 / m2, 1, HALF)
    return _below_by_lerch(pieces, lerch, count)


def _below_by_lerch(pieces: list[MasterPiece], value: Expr, count: int) -> list[MasterPiece]:
    """Write L_1 by Lerch's function in all pieces but the one above threshold."""
    if count < 2:
        return pieces
    return [*(piece.with_lerch(value) for piece in pieces[:-1]), pieces[-1]]
