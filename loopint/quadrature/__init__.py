"""Independent check: the Feynman-parameter representation, integrated numerically.

Imports `loopint.core` only, and shares no formula with the closed forms.
"""

from loopint.quadrature.feynman import ArithmeticName, QuadratureResult, integrate_feynman

__all__ = ["ArithmeticName", "QuadratureResult", "integrate_feynman"]
