r"""Iterated integrals of dt/t and dt/(1-t), written by logarithms and Nielsen polylogarithms.

A word in the letters 0 and 1 stands for an iterated integral,

    H(0 w; z) = Int_0^z dt/t H(w; t),        H(1 w; z) = Int_0^z dt/(1-t) H(w; t),

with H(0^n; z) = log(z)^n/n!, so that H(1; z) = -log(1-z) and H(0^n 1^p; z) = S_{n,p}(z), Nielsen's
polylogarithm.  Products are sums over shuffles, and every word is a polynomial in Lyndon words
(D. E. Radford, J. Algebra 58 (1979) 432; harmonic polylogarithms: E. Remiddi, J. Vermaseren,
hep-ph/9905237).  Through four letters these are 0, 1 and 0^n 1^p only.
"""

from __future__ import annotations

from collections import Counter
from functools import lru_cache
from itertools import product
from math import factorial
from typing import TYPE_CHECKING, TypeAlias

import sympy
from flint import fmpq

from loopint.formulas.expansion import Expr, rational
from loopint.formulas.functions import NielsenS

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

S = sympy.S
Words: TypeAlias = dict[str, fmpq]
Products: TypeAlias = dict[tuple[str, ...], fmpq]
ONE = fmpq(1)


def integrated(letter: str, words: Mapping[str, fmpq]) -> Words:
    """Integrate a combination of words with dt/t ("0") or dt/(1-t) ("1")."""
    return {letter + word: number for word, number in words.items()}


def combined(*parts: tuple[fmpq, Mapping[str, fmpq]]) -> Words:
    """Add multiples of combinations of words."""
    total: Words = {}
    for factor, words in parts:
        for word, number in words.items():
            total[word] = total.get(word, fmpq(0)) + factor * number
    return {word: number for word, number in total.items() if number != 0}


@lru_cache(maxsize=4096)
def shuffles(first: str, second: str) -> tuple[tuple[str, int], ...]:
    """Return the words of a product, with their multiplicities.

    Examples
    --------
    >>> shuffles("1", "01")
    (('011', 2), ('101', 1))
    """
    if not first or not second:
        return ((first + second, 1),)
    found: Counter[str] = Counter()
    for a, b in ((first, second), (second, first)):
        for word, number in shuffles(a[1:], b):
            found[a[0] + word] += number
    return tuple(sorted(found.items()))


def lyndon_factors(word: str) -> list[str]:
    """Factorise a word into Lyndon words that do not increase (J.-P. Duval, J. Algorithms 4, 1983).

    Examples
    --------
    >>> lyndon_factors("110010")
    ['1', '1', '001', '0']
    """
    factors = []
    start = 0
    while start < len(word):
        end, compared = start + 1, start
        while end < len(word) and word[compared] <= word[end]:
            compared = start if word[compared] < word[end] else compared + 1
            end += 1
        while start <= compared:
            factors.append(word[start : start + end - compared])
            start += end - compared
    return factors


@lru_cache(maxsize=4096)
def by_lyndon_words(word: str) -> tuple[tuple[tuple[str, ...], fmpq], ...]:
    """Write a word as a polynomial in Lyndon words.

    The shuffles of the Lyndon factors of a word are a multiple of the word, plus smaller words.

    Examples
    --------
    H(101) = H(1) H(01) - 2 H(011):

    >>> by_lyndon_words("101")
    ((('011',), -2), (('1', '01'), 1))
    """
    factors = lyndon_factors(word)
    if len(factors) < 2:
        return ((tuple(factors), ONE),)
    total: dict[str, int] = {"": 1}
    for factor in factors:
        longer: Counter[str] = Counter()
        for one, number in total.items():
            for shuffled, multiplicity in shuffles(one, factor):
                longer[shuffled] += number * multiplicity
        total = dict(longer)
    leading = total.pop(word)
    result: Products = {tuple(factors): ONE / leading}
    for smaller, number in total.items():
        for key, coefficient in by_lyndon_words(smaller):
            result[key] = result.get(key, fmpq(0)) - coefficient * number / leading
    return tuple(sorted((key, number) for key, number in result.items() if number != 0))


def nielsen_indices(word: str) -> tuple[int, int] | None:
    """Return n and p of a word 0^n 1^p, n, p >= 1."""
    n = word.count("0")
    p = len(word) - n
    return (n, p) if n and p and word == "0" * n + "1" * p else None


def lyndon_polynomial(words: Mapping[str, fmpq]) -> Products:
    """Write a combination of words as a polynomial in Lyndon words."""
    total: Products = {}
    for word, number in words.items():
        for key, coefficient in by_lyndon_words(word):
            total[key] = total.get(key, fmpq(0)) + number * coefficient
    return {key: number for key, number in total.items() if number != 0}


def is_covered(polynomial: Products) -> bool:
    """Whether logarithms and Nielsen polylogarithms are enough."""
    return all(len(w) == 1 or nielsen_indices(w) for words in polynomial for w in words)


def written(polynomial: Products, function: Callable[[str], Expr]) -> Expr:
    """Write a polynomial in Lyndon words by the functions of these words."""
    return sympy.Add(
        *(
            rational(number) * sympy.Mul(*map(function, words))
            for words, number in polynomial.items()
        )
    )


@lru_cache(maxsize=64)
def nielsen_at_one(n: int, p: int) -> Expr:
    """Return S_{n,p}(1) in zeta values.

    sum_{n,p} S_{n,p}(1) x^n y^p = 1 - Gamma(1-x) Gamma(1-y)/Gamma(1-x-y)
    (K. S. Kölbig, SIAM J. Math. Anal. 17 (1986) 1232).

    Examples
    --------
    >>> nielsen_at_one(1, 2), nielsen_at_one(2, 2)
    (zeta(3), pi**4/360)
    """
    return sympy.expand(-_beta_coefficient(n, p))


@lru_cache(maxsize=256)
def _beta_coefficient(n: int, p: int) -> Expr:
    """Return the coefficient of x^n y^p in Gamma(1-x) Gamma(1-y)/Gamma(1-x-y) = exp(g).

    g = -sum_{k>=2} zeta(k)/k [(x+y)^k - x^k - y^k], and x d/dx exp(g) = (x d/dx g) exp(g).
    """
    if n == 0 or p == 0:
        return S.One if n == p == 0 else S.Zero
    total = S.Zero
    for i in range(1, n + 1):
        for j in range(1, p + 1):
            g = -sympy.zeta(i + j) / (i + j) * sympy.binomial(i + j, i)
            total += i * g * _beta_coefficient(n - i, p - j)
    return total / n


def beyond_one(n: int, p: int, logarithm: Expr, complement: Expr, inverse: Expr) -> Expr:
    """Write S_{n,p}(z + i0), z > 1, by functions of 1/z.

    With y = 1/z, dz/z = -dy/y and dz/(1-z) = dy/y + dy/(1-y); at z = 1 both sides agree.

    Parameters
    ----------
    logarithm, complement, inverse
        log(z), log(1 - 1/z) and 1/z.
    """
    # -log(1-z-i0) = H(0; y) + H(1; y) + i pi; x^p/p! of x = H(0) + H(1) is the sum of all words
    words: dict[str, Expr] = {}
    for k in range(p + 1):
        for letters in product("01", repeat=p - k):
            words["".join(letters)] = (sympy.I * sympy.pi) ** k / factorial(k)
    for m in range(1, n + 1):
        words = {"0" + word: -number for word, number in words.items()}
        words[""] = nielsen_at_one(m, p) - _total(words, _value_at_one)

    def function(word: str) -> Expr:
        if len(word) == 1:
            return -logarithm if word == "0" else -complement
        return NielsenS(*_indices(word), inverse)

    return sympy.expand(_total(words, function))


def _total(words: Mapping[str, Expr], function: Callable[[str], Expr]) -> Expr:
    """Evaluate words; those that are not Nielsen's cancel in what `beyond_one` needs."""
    total: dict[tuple[str, ...], Expr] = {}
    for word, number in words.items():
        for key, coefficient in by_lyndon_words(word):
            total[key] = total.get(key, S.Zero) + number * rational(coefficient)
    return sympy.Add(
        *(c * sympy.Mul(*map(function, key)) for key, c in total.items() if c.expand() != 0)
    )


def _value_at_one(word: str) -> Expr:
    return S.Zero if word == "0" else nielsen_at_one(*_indices(word))


def _indices(word: str) -> tuple[int, int]:
    indices = nielsen_indices(word)
    assert indices is not None, word
    return indices
