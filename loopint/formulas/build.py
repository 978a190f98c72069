"""From the name of an integral to its formula.

========================================  ==========================================================
tadpole, both_massless, on_shell,         a product of Gamma functions and one power
zero_momentum_equal_mass
epsilon in the powers                     `loopint.formulas.propagators`, with Laurent coefficients
                                          of Gauss functions from `loopint.formulas.gauss_series`
everything else                           `loopint.integrals.reduction` to tadpoles A(1) and, where
                                          the kinematics has it, the bubble B(1,1), in d = 2 - 2 eps
                                          or d = 3 - 2 eps; B(1,1) from `loopint.formulas.masters`
========================================  ==========================================================
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import reduce as fold
from math import factorial
from typing import TYPE_CHECKING

import sympy
from flint import fmpq

from loopint.core.conventions import Conventions, Measure, PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear, gamma_ratio
from loopint.core.errors import InputError, UnsupportedIntegralError
from loopint.core.gamma_factors import EpsilonFactor
from loopint.formulas import iterated, masters, propagators
from loopint.formulas.expansion import (
    EPS,
    Expansion,
    Expr,
    expand_factor,
    expand_rational,
    exponential,
    oriented_factors,
    rational,
    root_pi,
    tidy,
)
from loopint.formulas.formula import Definition, Formula, Piece
from loopint.formulas.functions import NielsenS
from loopint.formulas.gauss_series import gauss_expansion
from loopint.formulas.masters import KALLEN, L_CLOSED, MU2, P2, MasterPiece, l_symbol, symbol
from loopint.formulas.texts import domain, prescription, sources
from loopint.integrals.reduction import Kinematics, reduce_bubble
from loopint.integrals.registry import Integral

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Sequence

S = sympy.S
HIGHEST = 8
FAMILIES = ("tadpole", "bubble", "propagator")
M_SQUARED, M1_SQUARED, M2_SQUARED = map(symbol, ("m_squared", "m1_squared", "m2_squared"))
M = symbol("m")
L, L1, L2, L_MU, L_SCALE = map(symbol, ("l", "l_1", "l_2", "l_mu", "r"))
Z, L_COMPLEMENT = symbol("z"), symbol("u")
KALLEN_POLYNOMIAL = sympy.expand((P2 - M1_SQUARED - M2_SQUARED) ** 2 - 4 * M1_SQUARED * M2_SQUARED)


def build_formula(
    family: str,
    powers: int | Sequence[object] | None = None,
    *,
    kinematics: str = "general",
    dimension: int = 4,
    orders: tuple[int, int] = (-1, 2),
    propagator_sign: str = "minkowski",
    measure: str = "msbar",
) -> Formula:
    """Return the closed form of an integral; the arguments are those of `loopint.formula`."""
    if family not in FAMILIES:
        raise InputError(f"family = {family!r}: no formula; accepted: {', '.join(FAMILIES)}")
    integral = Integral.parse(family, powers, dimension, orders)
    if family == "propagator" and integral.epsilon_power_free:
        family = "bubble"  # integer powers
        plain = tuple(int(n.constant.p) for n in integral.powers)
        integral = Integral.parse(family, plain, dimension, orders)
    conventions = Conventions.parse(measure, propagator_sign, 1)
    if integral.orders[1] > HIGHEST:
        raise UnsupportedIntegralError(
            f"orders = {integral.orders}: formulas are printed through order {HIGHEST}; "
            f"accepted: highest <= {HIGHEST}"
        )
    chosen = _kinematics(family, kinematics)
    request = _Request(integral, chosen, conventions.measure, conventions.propagator_sign)
    if family == "tadpole":
        pieces, symbols = _tadpole(request), (M_SQUARED, MU2)
    elif family == "propagator":
        pieces, symbols = _propagator(request), _variables(chosen)
    else:
        pieces, symbols = _bubble(request), _variables(chosen)
    pieces = [_pruned(piece) for piece in pieces]
    name = "tadpole" if family == "tadpole" else str(chosen)
    return Formula(
        family,
        integral.powers,
        str(chosen),
        dimension,
        integral.orders,
        conventions.propagator_sign,
        conventions.measure,
        symbols,
        tuple(pieces),
        domain(name, pieces),
        prescription(name, pieces),
        sources(name, integral.powers, dimension, pieces),
    )


@dataclass(frozen=True)
class _Request:
    integral: Integral
    kinematics: Kinematics
    measure: Measure
    sign_convention: PropagatorSign

    @property
    def s0(self) -> fmpq:
        """d0/2 - sum of powers."""
        return self.integral.mass_dimension

    @property
    def sign(self) -> int:
        return self.sign_convention.sign(sum(int(n.constant.p) for n in self.linear_powers))

    @property
    def linear_powers(self) -> tuple[EpsilonLinear, ...]:
        """The powers, with the parts that depend on eps."""
        return tuple(
            n if isinstance(n, EpsilonLinear) else EpsilonLinear.of(n, 0)
            for n in self.integral.powers
        )

    def scale(self, logarithm: Expr) -> tuple[Expr, tuple[Definition, ...]]:
        """Return r in exp(-eps r), what sign and scale contribute, and its definition.

        The scale is (Q/mu^2)^(-eps), Q^(-eps) = exp(-eps logarithm), and, with powers n + a eps of
        sum N + A eps, Q^(-A eps) exp(-i pi A eps) for minkowski propagators: mu^2 enters only as
        (mu^2)^eps.
        """
        rate = rational(self.integral.epsilon_power)
        if rate == 0:
            return L, ((L, logarithm),)
        phase = S.Zero
        if self.sign_convention is PropagatorSign.MINKOWSKI:
            phase = sympy.I * sympy.pi
        total = sympy.expand(L + rate * (L + L_MU + phase))
        return L_SCALE, ((L, logarithm), (L_MU, sympy.log(MU2)), (L_SCALE, total))

    @property
    def measure_factor(self) -> EpsilonFactor:
        return self.measure.factor(self.integral.dimension)

    def measure_expression(self) -> Expr:
        """Write N(eps) as it is defined."""
        gamma, d = sympy.gamma, self.integral.dimension - 2 * EPS
        match self.measure:
            case Measure.MSBAR:
                return sympy.exp(sympy.EulerGamma * EPS)
            case Measure.PLAIN:
                return S.One
            case Measure.GAMMA:
                return 1 / gamma(1 + EPS)
            case Measure.R_GAMMA:
                return gamma(1 - 2 * EPS) / (gamma(1 + EPS) * gamma(1 - EPS) ** 2)
            case Measure.TWO_PI:
                return (4 * sympy.pi) ** (-d / 2)

    def coefficients(self, value: Callable[[int], Expr]) -> dict[int, Expr]:
        lowest, highest = self.integral.orders
        return {order: value(order) for order in range(lowest, highest + 1)}

    def zero(self) -> list[Piece]:
        return [Piece((), (), S.Zero, self.coefficients(lambda _: S.Zero))]


def _kinematics(family: str, kinematics: str) -> Kinematics:
    accepted = ["general"] if family == "tadpole" else [str(k) for k in Kinematics]
    if kinematics not in accepted:
        raise InputError(
            f"kinematics = {kinematics!r} is unknown for a {family}; "
            f"accepted: {', '.join(accepted)}"
        )
    return Kinematics(kinematics)


def _variables(kinematics: Kinematics) -> tuple[Expr, ...]:
    match kinematics:
        case Kinematics.GENERAL:
            return (P2, M1_SQUARED, M2_SQUARED, MU2)
        case Kinematics.EQUAL_MASS | Kinematics.ONE_MASSLESS:
            return (P2, M_SQUARED, MU2)
        case Kinematics.BOTH_MASSLESS:
            return (P2, MU2)
        case Kinematics.ZERO_MOMENTUM | Kinematics.THRESHOLD | Kinematics.PSEUDOTHRESHOLD:
            return (M1_SQUARED, M2_SQUARED, MU2)
        case _:
            return (M_SQUARED, MU2)


# One product of Gamma functions ---------------------------------------------------------------


def _tadpole(request: _Request) -> list[Piece]:
    return _one_mass_power(request, request.integral.powers[0])


def _one_mass_power(request: _Request, n: int) -> list[Piece]:
    """Return A(n) = Gamma(-s)/Gamma(n) (m^2)^s."""
    if n <= 0:
        return request.zero()
    gammas = [(-request.s0, 1, 1)]
    return [_gamma_piece(request, gammas, factorial(n - 1), (), M_SQUARED, 0)]


def _both_massless(request: _Request) -> list[Piece]:
    """Return Gamma(-s) Gamma(n1+s) Gamma(n2+s)/(Gamma(n1) Gamma(n2) Gamma(N+2s)) (-p^2)^s."""
    n1, n2 = request.integral.powers
    if n1 <= 0 or n2 <= 0:
        return request.zero()
    s = request.s0
    gammas = [(-s, 1, 1), (n1 + s, -1, 1), (n2 + s, -1, 1), (n1 + n2 + 2 * s, -2, -1)]
    divisor = factorial(n1 - 1) * factorial(n2 - 1)
    return [
        _gamma_piece(request, gammas, divisor, (P2 < 0,), -P2, 0),
        _gamma_piece(request, gammas, divisor, (P2 > 0,), P2, -1),
    ]


def _on_shell(request: _Request) -> list[Piece]:
    """Return Gamma(-s) Gamma(n2+2s)/(Gamma(n2) Gamma(N+2s)) (m^2)^s, line 1 massless."""
    n1, n2 = request.integral.powers
    if n2 <= 0:
        return request.zero()
    if n1 <= 0:
        return _reduced(request)
    s = request.s0
    gammas = [(-s, 1, 1), (n2 + 2 * s, -2, 1), (n1 + n2 + 2 * s, -2, -1)]
    return [_gamma_piece(request, gammas, factorial(n2 - 1), (), M_SQUARED, 0)]


def _gamma_piece(
    request: _Request,
    gammas: Iterable[tuple[fmpq, fmpq | int, int]],
    divisor: int,
    conditions: tuple[Expr, ...],
    base: Expr,
    phase: int,
) -> Piece:
    """Return prod Gamma(a + b eps)^k / divisor * (base e^(i pi phase))^s, base > 0."""
    factor, expression = request.measure_factor, request.measure_expression()
    for a, b, k in gammas:
        one = EpsilonFactor.gamma(a, b)
        factor = factor * one if k > 0 else factor / one
        expression *= sympy.gamma(rational(fmpq(a)) + rational(fmpq(b)) * EPS) ** k
    weight = sympy.Rational(request.sign, divisor)
    s0 = rational(request.s0)
    power = base**s0 * sympy.exp(sympy.I * sympy.pi * phase * s0)
    logarithm = sympy.log(base / MU2) + sympy.I * sympy.pi * phase
    rate, definitions = request.scale(logarithm)
    count = request.integral.orders[1] - factor.lowest_order + 1
    series = Expansion(request.integral.orders[1], (S.Zero,))
    if count > 0:
        series = expand_factor(factor, count) * exponential(-rate, count)
    lead, sign = root_pi(factor) * power / divisor, request.sign
    return Piece(
        conditions,
        definitions,
        weight * power * expression * sympy.exp(-EPS * rate),
        request.coefficients(lambda order: lead * (sign * tidy(series[order], [rate], []))),
    )


# Powers that depend on epsilon ----------------------------------------------------------------


def _propagator(request: _Request) -> list[Piece]:
    propagators.check_kinematics(request.kinematics)
    powers, dimension = request.linear_powers, request.integral.dimension
    product = propagators.gamma_product(request.kinematics, powers, dimension)
    if product is None:
        return _gauss_pieces(request, powers, dimension)
    if any(x.is_pole_of_gamma for x in product.denominator):
        return request.zero()
    gammas = [(x.constant, x.rate, 1) for x in product.numerator]
    gammas += [(x.constant, x.rate, -1) for x in product.denominator]
    if request.kinematics is Kinematics.BOTH_MASSLESS:
        return [
            _gamma_piece(request, gammas, 1, (P2 < 0,), -P2, 0),
            _gamma_piece(request, gammas, 1, (P2 > 0,), P2, -1),
        ]
    return [_gamma_piece(request, gammas, 1, (), M_SQUARED, 0)]


def _gauss_pieces(
    request: _Request, powers: tuple[EpsilonLinear, ...], dimension: int
) -> list[Piece]:
    """Return the two-scale integrals: a Gauss function below and above z = 1."""
    form = propagators.gauss_form(request.kinematics, powers, dimension)
    ratio = gamma_ratio(form.gammas.numerator, form.gammas.denominator)
    if ratio is None:
        return request.zero()
    one_massless = request.kinematics is Kinematics.ONE_MASSLESS
    scale = M_SQUARED if one_massless else M2_SQUARED
    z = P2 / M_SQUARED if one_massless else (M2_SQUARED - M1_SQUARED) / M2_SQUARED
    rate, definitions = request.scale(sympy.log(scale / MU2))
    definitions = (*definitions, (Z, z))
    front = request.sign * request.measure_expression() * scale ** rational(request.s0)
    front *= propagators.gamma_expression(form.gammas) * sympy.exp(-EPS * rate)
    coefficients, words = _gauss_coefficients(request, form, ratio, scale, z, rate)
    complement = 1 - Z if one_massless else M1_SQUARED / M2_SQUARED
    below = [(L_COMPLEMENT, sympy.log(complement))]
    below += [(_nielsen_symbol(n, p), NielsenS(n, p, Z)) for n, p in words]
    closed = front * propagators.gauss_function(form, Z)
    if not one_massless:
        return [Piece((), (*definitions, *below), closed, coefficients)]
    logarithms = sympy.log(Z), sympy.log(1 - 1 / Z)
    above = [(L_COMPLEMENT, sympy.log(Z - 1) - sympy.I * sympy.pi)]
    above += [
        (_nielsen_symbol(n, p), iterated.beyond_one(n, p, *logarithms, 1 / Z)) for n, p in words
    ]
    beyond = front * propagators.beyond_one(form, Z)
    return [
        Piece((sympy.Ne(P2, 0), P2 < M_SQUARED), (*definitions, *below), closed, coefficients),
        Piece((P2 > M_SQUARED,), (*definitions, *above), beyond, coefficients),
    ]


def _gauss_coefficients(
    request: _Request,
    form: propagators.GaussForm,
    ratio: EpsilonFactor,
    scale: Expr,
    z: Expr,
    rate: Expr,
) -> tuple[dict[int, Expr], list[tuple[int, int]]]:
    """Return the coefficients, and n, p of the Nielsen polylogarithms in them."""
    if request.integral.dimension % 2:
        return {}, []
    found: set[tuple[int, int]] = set()

    def function(word: str) -> Expr:
        if word == "1":
            return -L_COMPLEMENT
        n, p = word.count("0"), word.count("1")
        found.add((n, p))
        return _nielsen_symbol(n, p)

    factor = request.measure_factor * ratio
    highest = request.integral.orders[1]
    count = highest - factor.lowest_order + 2  # 2F1 may begin at 1/eps
    if count <= 0:
        return request.coefficients(lambda _: S.Zero), []
    gauss = gauss_expansion(form.a, form.b, form.c, count, z, function)
    series = expand_factor(factor, count) * exponential(-rate, count) * gauss
    if series.highest < highest:
        raise UnsupportedIntegralError(
            f"orders = {request.integral.orders}: beyond order {series.highest} the coefficients "
            f"of these powers are not Nielsen polylogarithms; accepted: highest <= {series.highest}"
        )
    words = sorted(found, key=lambda index: (sum(index), index[1]))
    generators = [rate, L_COMPLEMENT, *(_nielsen_symbol(n, p) for n, p in words)]
    front = request.sign * scale ** rational(request.s0) * z**form.power
    return request.coefficients(lambda k: tidy(front * series[k], generators, [])), words


def _nielsen_symbol(n: int, p: int) -> Expr:
    """Return the symbol of S_{n,p}(z), continued to z + i0."""
    return symbol(f"s_{n}{p}")


# Masters --------------------------------------------------------------------------------------


def _bubble(request: _Request) -> list[Piece]:
    match request.kinematics:
        case Kinematics.BOTH_MASSLESS:
            return _both_massless(request)
        case Kinematics.ON_SHELL:
            return _on_shell(request)
        case Kinematics.ZERO_MOMENTUM_EQUAL_MASS:
            return _one_mass_power(request, sum(request.integral.powers))
        case _:
            return _reduced(request)


@dataclass(frozen=True)
class _Term:
    """coefficient * root * series in a reduction; closed is what the series sums to."""

    coefficient: Expr
    root: Expr
    rate: Expr | None  # the series is exp(-eps rate), or L if None
    closed: Expr


MASSES: dict[str, tuple[Expr, Expr, Expr, Expr]] = {
    # name of the mass in a reduction: mass, its logarithm, that logarithm, (definition of mass)
    "m_squared": (M, L, M_SQUARED, sympy.sqrt(M_SQUARED)),
    "m1_squared": (masters.M1, L1, M1_SQUARED, sympy.sqrt(M1_SQUARED)),
    "m2_squared": (masters.M2, L2, M2_SQUARED, sympy.sqrt(M2_SQUARED)),
    "m1": (masters.M1, L1, M1_SQUARED, sympy.sqrt(M1_SQUARED)),
    "m2": (masters.M2, L2, M2_SQUARED, sympy.sqrt(M2_SQUARED)),
}
MASTER_PIECES: dict[tuple[Kinematics, int], Callable[[int], list[MasterPiece]]] = {
    (Kinematics.GENERAL, 0): masters.even_general,
    (Kinematics.GENERAL, 1): masters.odd_general,
    (Kinematics.EQUAL_MASS, 0): masters.even_equal,
    (Kinematics.EQUAL_MASS, 1): masters.odd_equal,
    (Kinematics.ONE_MASSLESS, 0): masters.even_one_massless,
    (Kinematics.ONE_MASSLESS, 1): masters.odd_one_massless,
}
# B^(2)(1,1) = -2 Gamma(eps) * root * L * this
EVEN_MASTER: dict[Kinematics, tuple[Expr, Expr]] = {
    Kinematics.GENERAL: (masters.R, 1 / KALLEN_POLYNOMIAL),
    Kinematics.EQUAL_MASS: (masters.BETA, 1 / (P2 - 4 * M_SQUARED)),
    Kinematics.ONE_MASSLESS: (S.One, 1 / (P2 - M_SQUARED)),
}
INVERSE_P = sympy.Dummy("inverse_p")


def _reduced(request: _Request) -> list[Piece]:
    """Build the formula from the masters of the reduction."""
    terms = _terms(request)
    if not terms:
        return request.zero()
    odd = request.integral.dimension % 2
    half = fmpq(odd, 2)
    factor = request.measure_factor * EpsilonFactor.gamma(half, 1)
    highest = request.integral.orders[1]
    series: list[Expansion] = []
    depth = 1
    for term in terms:
        lowest = expand_rational(term.coefficient, 1).lowest
        count = highest - factor.lowest_order - lowest + 1
        if count <= 0:
            continue
        if term.rate is None:
            depth = max(depth, count)
        series.append(_term_series(term, factor, count, request))
    master_pieces = _master_pieces(request, terms, depth)
    lead = root_pi(factor)
    generators = [L, L1, L2, *(l_symbol(k) for k in range(1, depth))]
    roots = [term.root for term in terms if term.root != 1]

    def coefficient(order: int) -> Expr:
        total = request.sign * sum((one[order] for one in series), S.Zero)
        return lead * _readable(tidy(total, generators, roots))

    coefficients = request.coefficients(coefficient)
    prefactor = request.measure_expression() * sympy.gamma(rational(half) + EPS)
    closed = prefactor * _readable(_bracket(terms, request.sign))
    common = _common_definitions(request)
    return [
        Piece(
            piece.conditions,
            (
                *common,
                *piece.definitions,
                *((l_symbol(k), v) for k, v in enumerate(piece.values) if k),
                (L_CLOSED, piece.closed),
            ),
            closed,
            coefficients,
        )
        for piece in master_pieces
    ]


def _terms(request: _Request) -> list[_Term]:
    odd = request.integral.dimension % 2
    n1, n2 = request.integral.powers
    reduction = reduce_bubble(
        (n1, n2),
        request.integral.dimension,
        kinematics=str(request.kinematics),
        master_dimension=2 + odd,
        propagator_sign="euclidean",
    )
    d = symbol("d")
    terms = []
    for master, value in reduction.coefficients.items():
        coefficient = value.subs(d, request.integral.dimension - 2 * EPS)
        if master.mass is None:
            root, extra = EVEN_MASTER[request.kinematics]
            if odd:
                root, extra = INVERSE_P, 1 / (2 * EPS)
            terms.append(_Term(sympy.factor(-2 * extra * coefficient), root, None, L_CLOSED))
            continue
        mass, logarithm, _, _ = MASSES[master.mass]
        # A(1) = Gamma(eps) (m^2)^(-eps), or Gamma(-1/2+eps) (m^2)^(1/2-eps)
        root, extra = (mass, 1 / (EPS - sympy.Rational(1, 2))) if odd else (S.One, S.One)
        if master.mass in {"m1", "m2"}:  # the variables are the masses themselves
            coefficient, root = coefficient * root, S.One
        closed = sympy.exp(-EPS * logarithm)
        terms.append(_Term(sympy.factor(extra * coefficient), root, logarithm, closed))
    return terms


def _term_series(term: _Term, factor: EpsilonFactor, count: int, request: _Request) -> Expansion:
    series = expand_factor(factor, count) * expand_rational(term.coefficient, count)
    if term.rate is not None:
        inner = exponential(-term.rate, count)
    else:
        first = _master_builder(request)(1)[0].values[0]
        inner = Expansion(0, (first, *(l_symbol(k) for k in range(1, count))))
    return (series * inner).scaled(term.root)


def _master_builder(request: _Request) -> Callable[[int], list[MasterPiece]]:
    return MASTER_PIECES[request.kinematics, request.integral.dimension % 2]


def _master_pieces(request: _Request, terms: list[_Term], depth: int) -> list[MasterPiece]:
    if all(term.rate is not None for term in terms):
        return [MasterPiece((), (), (), S.Zero)]
    return _master_builder(request)(depth)


def _common_definitions(request: _Request) -> list[Definition]:
    found: list[Definition] = []
    names = {
        Kinematics.EQUAL_MASS: ("m_squared",),
        Kinematics.ONE_MASSLESS: ("m_squared",),
        Kinematics.ZERO_MOMENTUM_ONE_MASSLESS: ("m_squared",),
        Kinematics.ON_SHELL: ("m_squared",),
    }.get(request.kinematics, ("m1_squared", "m2_squared"))
    for name in names:
        mass, logarithm, squared, root = MASSES[name]
        found += [(mass, root), (logarithm, sympy.log(squared / MU2))]
    if request.kinematics is Kinematics.GENERAL:
        found.append((KALLEN, (P2 - M1_SQUARED - M2_SQUARED) ** 2 - 4 * M1_SQUARED * M2_SQUARED))
    return found


def _bracket(terms: list[_Term], sign: int) -> Expr:
    """Sum the terms, with the factors that all coefficients share in front."""
    factorised = [_factors(term.coefficient) for term in terms]
    shared = {
        base: min((f.get(base, 0) for f in factorised), key=abs)
        for base in factorised[0]
        if all(f.get(base, 0) * factorised[0][base] > 0 for f in factorised)
    }
    for prime in {base for f in factorised for base in f if base.is_Integer}:  # one denominator
        shared[prime] = min(f.get(prime, 0) for f in factorised)
    total = S.Zero
    for term, factors in zip(terms, factorised, strict=True):
        bases = factors.keys() | shared.keys()
        rest = sympy.Mul(*(b ** (factors.get(b, 0) - shared.get(b, 0)) for b in bases))
        total += rest * term.root * term.closed
    return sympy.Mul(*(b**e for b, e in shared.items())) * (sign * total)


def _factors(coefficient: Expr) -> dict[Expr, int]:
    """Return factors and their powers, with the prime factors of the number."""
    number, found = oriented_factors(coefficient)
    for prime, power in sympy.factorrat(number).items():
        found[S(prime)] = power
    return found


def _readable(expression: Expr) -> Expr:
    """Write lambda and 1/p by their symbols, and m/m^2 as 1/m."""
    expression = expression.xreplace({KALLEN_POLYNOMIAL: KALLEN, INVERSE_P: 1 / masters.P})
    for mass, _, squared, _ in MASSES.values():
        expression = expression.replace(
            lambda e, m=mass: e.is_Mul and m in e.args,
            lambda e, m=mass, m2=squared: _merged(e, m, m2),
        )
    return expression


def _merged(product: Expr, mass: Expr, squared: Expr) -> Expr:
    power = sum(f.exp for f in product.args if f.is_Pow and f.base == squared and f.exp < 0)
    return product * (squared**-power * mass ** (2 * power))


def _pruned(piece: Piece) -> Piece:
    """Drop the abbreviations that nothing uses."""
    needed = fold(
        set.union,
        (x.free_symbols for x in (piece.closed_form, *piece.coefficients.values())),
        set[Expr](),
    )
    for condition in piece.conditions:
        needed |= condition.free_symbols
    kept: list[Definition] = []
    for name, value in reversed(piece.definitions):
        if name in needed:
            kept.append((name, value))
            needed |= value.free_symbols
    return Piece(piece.conditions, tuple(reversed(kept)), piece.closed_form, piece.coefficients)
