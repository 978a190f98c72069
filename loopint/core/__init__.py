"""Exact numbers, balls, Laurent series, kinematics and conventions: the ground floor."""
