"""Closed forms of the integral families as sympy expressions, and their printing."""
