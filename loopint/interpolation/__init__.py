"""Certified interpolants over a range of p^2: built once, evaluated millions of times in a fit."""
