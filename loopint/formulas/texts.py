"""What a formula says about its domain, its i0 and its sources."""

from __future__ import annotations

from typing import TYPE_CHECKING

import sympy

from loopint.core.epsilon_linear import EpsilonLinear
from loopint.formulas.functions import NielsenS, clausen2, log_sine

if TYPE_CHECKING:
    from collections.abc import Sequence

    from loopint.formulas.formula import Piece

GAMMA = "expansion of Gamma functions: DLMF 5.5.1, 5.5.5, 5.7.3"
EULER = "2F1 by Euler's integral: DLMF 15.6.1, 15.8.1"
NIELSEN = "Nielsen polylogarithms: Kölbig, SIAM J. Math. Anal. 17 (1986) 1232; Li_s: DLMF 25.12"
LOG_SINE = (
    "all orders in eps by log-sine functions: Davydychev, hep-ph/9910224; "
    "Cl_2 and Ls_j: Lewin, Polylogarithms and Associated Functions (1981)"
)
FINITE_PART = "the finite part in d = 4: 't Hooft, Veltman, Nucl. Phys. B153 (1979) 365"
ONE_MASS = "one massive line: Boos, Davydychev, Theor. Math. Phys. 89 (1991) 1052"
MASSLESS = "massless lines: Chetyrkin, Kataev, Tkachov, Nucl. Phys. B174 (1980) 345"
REDUCTION = (
    "reduction to masters: Chetyrkin, Tkachov, Nucl. Phys. B192 (1981) 159; Tarasov, hep-th/9606018"
)
LERCH = "2F1(1,b;b+1;z) = b Phi(z,1,b), Lerch's function: DLMF 15.2.1, 25.14.1"
BEYOND = "above threshold, by functions of 1/z or 1-1/z: DLMF 15.8.2, 15.8.5"
SERIES = (
    "eps-series of 2F1 by contiguous relations and its differential equation: DLMF 15.5.11-15.5.18,"
    " 15.10.1; iterated integrals: Remiddi, Vermaseren, hep-ph/9905237"
)
GAUSS = "the value on shell by Gauss's sum: DLMF 15.4.20"

REAL = "nothing to choose: Q > 0 between the ends of the Feynman parameter"
ABOVE = (
    "p^2 means p^2 + i0, m^2 means m^2 - i0; above threshold log(-x - i0) = log(x) - i pi, x > 0, "
    "is written out, and no other logarithm is on its cut"
)
EXACTLY = "the value of dimensional regularisation exactly there"


ON_AXIS = "real p^2 other than "
DOMAINS = {
    "tadpole": "m^2 > 0, or complex with Im m^2 < 0",
    "general": f"m1^2, m2^2 > 0; {ON_AXIS}0, (m1 - m2)^2 and (m1 + m2)^2",
    "equal_mass": f"m1 = m2 = m, m^2 > 0; {ON_AXIS}0 and 4 m^2",
    "one_massless": f"m1 = 0, m2 = m, m^2 > 0; {ON_AXIS}0 and m^2",
    "both_massless": f"m1 = m2 = 0; {ON_AXIS}0",
    "zero_momentum": "p^2 = 0; m1^2, m2^2 > 0 and different",
    "zero_momentum_equal_mass": "p^2 = 0; m1 = m2 = m, m^2 > 0",
    "zero_momentum_one_massless": "p^2 = 0; m1 = 0, m2 = m, m^2 > 0",
    "threshold": f"p^2 = (m1 + m2)^2 exactly; m1^2, m2^2 > 0; {EXACTLY}",
    "pseudothreshold": f"p^2 = (m1 - m2)^2 exactly; m1^2, m2^2 > 0 and different; {EXACTLY}",
    "on_shell": f"m1 = 0, p^2 = m2^2 = m^2 exactly, m^2 > 0; {EXACTLY}",
}
PRESCRIPTIONS = {
    "tadpole": "m^2 means m^2 - i0; the logarithm of m^2 is principal",
    "general": ABOVE,
    "equal_mass": ABOVE,
    "one_massless": ABOVE,
    "both_massless": (
        "p^2 means p^2 + i0: for p^2 > 0, log(-p^2 - i0) = log(p^2) - i pi is written out"
    ),
}


def domain(name: str, pieces: Sequence[Piece]) -> str:
    """Say where the formula holds; without conditions on p^2 any p^2 is good."""
    text = DOMAINS[name]
    if ON_AXIS in text and not pieces[0].conditions:
        return f"{text.split(ON_AXIS)[0]}any real p^2"
    return text


def prescription(name: str, pieces: Sequence[Piece]) -> str:
    """Say how the i0 is taken into account."""
    if name != "tadpole" and not pieces[0].conditions:
        return REAL
    return PRESCRIPTIONS.get(name, REAL)


def sources(
    name: str, powers: tuple[int | EpsilonLinear, ...], dimension: int, pieces: Sequence[Piece]
) -> tuple[str, ...]:
    """Name the publications of what the formula uses, by the functions in it."""
    values = [
        value
        for piece in pieces
        for value in (
            piece.closed_form,
            *piece.coefficients.values(),
            *(value for _, value in piece.definitions),
        )
    ]
    if all(value == 0 for value in values):
        return ()

    def uses(*functions: object) -> bool:
        return any(value.has(*functions) for value in values)

    linear = any(isinstance(n, EpsilonLinear) for n in powers)
    special = uses(sympy.hyper)
    two_scales = linear and name in {"one_massless", "zero_momentum"}
    gamma_only = {"tadpole", "both_massless", "zero_momentum_equal_mass"}
    one_mass = linear and name in {"one_massless", "zero_momentum_one_massless"}
    found = {
        REDUCTION: name not in {*gamma_only, "on_shell"} and not linear,
        MASSLESS: name == "both_massless",
        ONE_MASS: name == "on_shell" or one_mass or (special and name == "one_massless"),
        GAUSS: name == "on_shell",
        EULER: special,
        NIELSEN: uses(sympy.polylog, NielsenS),
        LOG_SINE: uses(clausen2, log_sine),
        LERCH: uses(sympy.lerchphi),
        FINITE_PART: special and (powers, dimension) == ((1, 1), 4),
        SERIES: two_scales and any(piece.coefficients for piece in pieces),
        BEYOND: linear and special and len(pieces) > 1,
        GAMMA: any(piece.coefficients for piece in pieces),
    }
    return tuple(source for source, used in found.items() if used)
