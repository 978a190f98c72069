"""How the printed formulas name things."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopint.core.conventions import Measure, PropagatorSign
from loopint.core.epsilon_linear import EpsilonLinear

if TYPE_CHECKING:
    from collections.abc import Sequence


TEXT_NAMES = {
    "kallen": "lambda",
    "A_1": "A1",
    "A_2": "A2",
    "l_1": "l1",
    "l_2": "l2",
    "l_mu": "log(mu^2)",
    **{f"L_{k}": f"L{k}" for k in range(1, 60)},
    **{f"s_{n}{p}": f"s{n}{p}" for n in range(1, 12) for p in range(1, 12)},
}
LATEX_NAMES = {
    "eps": r"\varepsilon",
    "kallen": r"\lambda",
    "l_mu": r"\log{\left(\mu^{2} \right)}",
    "mu": r"\mu",
    "m1": "m_{1}",
    "m2": "m_{2}",
    "mh": r"m_{h}",
    "ml": r"m_{l}",
    **{f"{stem}{tag}": f"{stem}_{{{tag}}}" for stem in "tu" for tag in ("1", "2", "h", "l", "0")},
    "phi": r"\varphi",
    "phi1": r"\varphi_{1}",
    "phi2": r"\varphi_{2}",
}
LETTERS = {"tadpole": "A", "bubble": "B", "propagator": "P"}
HEADINGS = {
    "general": "general kinematics",
    "equal_mass": "equal masses",
    "one_massless": "one massless line",
    "both_massless": "both lines massless",
    "zero_momentum": "p^2 = 0",
    "zero_momentum_equal_mass": "p^2 = 0, equal masses",
    "zero_momentum_one_massless": "p^2 = 0, one massless line",
    "threshold": "at threshold",
    "pseudothreshold": "at pseudothreshold",
    "on_shell": "on shell with a massless line",
}
MEASURES = {
    Measure.MSBAR: "measure msbar: N(eps) = exp(gamma_E eps)",
    Measure.PLAIN: "measure plain: N(eps) = 1",
    Measure.GAMMA: "measure gamma: N(eps) = 1/Gamma(1+eps)",
    Measure.R_GAMMA: "measure r_gamma: N(eps) = Gamma(1-2 eps)/(Gamma(1+eps) Gamma(1-eps)^2)",
    Measure.TWO_PI: "measure two_pi: N(eps) = (4 pi)^(-d/2)",
}


def power_text(power: int | EpsilonLinear) -> str:
    """Write a power of a propagator.

    Examples
    --------
    >>> power_text(2), power_text(EpsilonLinear.of(1, -1)), power_text(EpsilonLinear.of(0, 2))
    ('2', '1 - eps', '2 eps')
    """
    if isinstance(power, int):
        return str(power)
    n, a = power.constant, power.rate
    if a == 0:
        return str(n)
    rate = "eps" if abs(a) == 1 else f"{abs(a)} eps"
    if n == 0:
        return rate if a > 0 else f"-{rate}"
    return f"{n} {'+' if a > 0 else '-'} {rate}"


def integral_definition(
    family: str, powers: Sequence[int | EpsilonLinear], sign: PropagatorSign
) -> str:
    """Write the definition of the integral."""
    momenta = ("q^2", "(q+p)^2")
    masses = ("m^2",) if family == "tadpole" else ("m1^2", "m2^2")
    factors = []
    for momentum, mass, power in zip(momenta, masses, powers, strict=False):
        if sign is PropagatorSign.MINKOWSKI:
            factor = f"({momentum} - {mass} + i0)"
        else:
            factor = f"({mass} - {momentum} - i0)"
        text = power_text(power)
        exponent = "" if text == "1" else f"^{text}" if text.isdigit() else f"^({text})"
        factors.append(factor + exponent)
    name = LETTERS[family]
    return f"{name} = N(eps) (mu^2)^eps Int d^dq/(i pi^(d/2)) 1/[{' '.join(factors)}]"
