"""Epsilon-expansions of Gauss functions as kinematics-independent tables of proven accuracy."""
