"""Kinematics of a block of points: the Källén function beyond double precision."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopint.arrays.rounding import (
    UNIT,
    Number,
    Real,
    as_complex,
    size,
    square_root,
    sum_of_products,
    sum_of_three,
    two_product,
    two_sum,
)


@dataclass(frozen=True, slots=True)
class Points:
    """A block of two-point kinematics and what is derived from it.

    Attributes
    ----------
    p, m1, m2
        p^2 and squared masses; exact.
    largest
        At least |p^2| + |m1^2| + |m2^2|.
    excess
        S = p^2 - m1^2 - m2^2.
    kallen, kallen_error
        lambda = S^2 - 4 m1^2 m2^2 and its relative error in units of UNIT: 0 where lambda is
        exactly zero, infinite where its sign is undecided.
    a1, a2
        A1 = p^2 + m1^2 - m2^2 and A2 = p^2 - m1^2 + m2^2.
    root, root_error
        A square root of lambda, and its relative error.
    shift, shift_error
        Series get a factor exp(shift eps); the error is absolute.

    `excess`, `a1` and `a2` have the absolute error UNIT (|value| + 3.2 UNIT largest).
    """

    p: Real
    m1: Number
    m2: Number
    largest: Real
    excess: Number
    kallen: Number
    kallen_error: Real
    a1: Number
    a2: Number
    root: Number
    root_error: Real
    shift: Real
    shift_error: Real

    def take(self, index: NDArray[np.intp]) -> Points:
        """Return some of the points."""
        return Points(*(getattr(self, name)[index] for name in self.__slots__))

    def exponent(self, log_m: Number, error: Real) -> tuple[Number, Real]:
        """Return the rate of (m^2)^(-eps) exp(shift eps) and its error, given log m^2."""
        rate = self.shift - log_m
        return rate, error + self.shift_error + size(rate)

    def absolute_error(self, value: Number) -> Real:
        """Return the error of `excess`, `a1` or `a2` in units of UNIT."""
        return size(value) + (3.2 * UNIT) * self.largest


def real_points(p: Real, m1: Real, m2: Real, shift: Real, shift_error: Real) -> Points:
    """Derive everything for real masses; `root` is sqrt(|lambda|).

    With S known within 2.1 UNIT^2 largest, what lambda loses at order UNIT^2 is less than
    UNIT^2 (14 S^2 + 4 (4 m1^2 m2^2) + 4.5 |S| largest + 5 UNIT^2 largest^2): little where lambda is
    small because a line is light, and p^2 near the other mass.
    """
    largest = np.abs(p) + m1 + m2
    s, s_low = sum_of_three(p, -m1, -m2)
    square, square_low = two_product(s, s)
    product, product_low = two_product(4.0 * m1, m2)
    head, head_low = two_sum(square, -product)
    kallen = head + (head_low + ((square_low + 2.0 * s * s_low) - product_low))
    exact_zero = (s_low == 0) & (head == 0) & (square_low == product_low)
    lost = 14.0 * square + 4.0 * product
    lost += largest * (4.5 * np.abs(s) + (5.0 * UNIT**2) * largest)
    error = 1.0 + UNIT * lost / np.abs(kallen)
    error = np.where(exact_zero, 0.0, np.where(error < 1.0 / (64.0 * UNIT**0.5), error, np.inf))
    return Points(
        p,
        m1,
        m2,
        largest,
        s,
        kallen,
        error,
        sum_of_three(p, m1, -m2)[0],
        sum_of_three(p, m2, -m1)[0],
        np.sqrt(np.abs(kallen)),
        0.51 * error + 1.0,
        shift,
        shift_error,
    )


def complex_points(p: Real, m1: Number, m2: Number, shift: Real, shift_error: Real) -> Points:
    """Derive everything for complex masses; `root` is the principal square root.

    `sum_of_products` errs by 60 UNIT^2 of its terms' sizes in each part, S by 2.1 UNIT^2 largest.
    """
    a, a_im, b, b_im = m1.real, m1.imag, m2.real, m2.imag
    nil = np.zeros_like(p)
    largest = np.abs(p) + size(m1) + size(m2)
    s, s_im = sum_of_three(p, -a, -b), two_sum(-a_im, -b_im)
    pair = [(x, nil) for x in (a, a_im, b, b_im)]
    kallen = as_complex(
        sum_of_products(
            [(1, s, s), (-1, s_im, s_im), (-4, pair[0], pair[2]), (4, pair[1], pair[3])]
        ),
        sum_of_products([(2, s, s_im), (-4, pair[0], pair[3]), (-4, pair[1], pair[2])]),
    )
    excess = as_complex(s[0], s_im[0])
    excess_size = size(excess)
    lost = 90.0 * (excess_size * excess_size + 4.0 * size(m1) * size(m2))
    lost += largest * (7.0 * excess_size + (10.0 * UNIT**2) * largest)
    error = 1.0 + UNIT * lost / size(kallen)
    error = np.where(error < 1.0 / (64.0 * UNIT**0.5), error, np.inf)
    return Points(
        p,
        m1,
        m2,
        largest,
        excess,
        kallen,
        error,
        as_complex(sum_of_three(p, a, -b)[0], a_im - b_im),
        as_complex(sum_of_three(p, b, -a)[0], b_im - a_im),
        square_root(kallen),
        0.51 * error + 3.5,
        shift,
        shift_error,
    )
