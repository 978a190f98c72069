"""Closed forms of the integral families, and the loop that proves the digits asked for."""
