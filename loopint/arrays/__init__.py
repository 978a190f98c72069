"""Integrals over arrays of float64 points: vectorised, with a proven error bound per value.

Rounding model
--------------
IEEE-754 binary64, round to nearest: +, -, *, / and sqrt are correctly rounded, so that
fl(x op y) = (x op y)(1+d), |d| <= u = 2^-53, barring overflow and underflow.  A product of complex
numbers is within sqrt(5) u of the exact one (Brent, Percival, Zimmermann, Math. Comp. 76 (2007)
1469), with or without fused multiply-add.  NumPy's log, log1p, arctan and arctan2 are assumed to be
within 4 ulp, in doubles and in extended precision; tests compare them with ball arithmetic.

Points are scaled by an exact power of two so that the largest of |p^2|, |m1^2|, |m2^2| is near 1;
points with a nonzero one below 2^-200 of it are left to ball arithmetic, so nothing underflows.

Errors are carried in units of u to first order; the products of two errors that this drops are
covered by 1 % on the final bound, as every relative error that is used is below 2^-20.

Stages
------
A point takes the first of these whose bound meets the tolerance, whatever the points beside it:

1.  Two orders of B(1,1), real masses: `logarithms`, three logarithms in plain doubles.
2.  The same in extended precision, if NumPy's `longdouble` has 64 bits or more: values close to
    zero, points close to thresholds, tolerances close to double precision.
3.  B(1,1), real masses: `ends` in plain doubles, where no w is close to 1 with lambda >= 0.
4.  `ends` with lambda and A beyond double precision: everything but roots of Q far from [0,1].
5.  `masters`: a Gauss rule for those, integration by parts for what is left.
6.  Ball arithmetic: fewer than one in a thousand of random points, and where there is no formula
    (a pole of the infrared, entries that span more than 2^200).

Arguments that were rounded: `conditioning` bounds what that costs, and the bounds grow by it.
"""
