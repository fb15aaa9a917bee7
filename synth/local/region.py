"""Exact test of the bounds on modes: no eigenvalue is computed, so none is rounded.

All roots of a real polynomial lie left of zero exactly if Routh's array has a first column of one sign (Routh 1877;
Gantmacher, The Theory of Matrices, 1959, chapter XV). Left of -a: shift the variable. Inside the disc |s| < w: put
s = w (q + 1)/(q - 1), which maps it onto the left half plane of q.
"""

from __future__ import annotations

from fractions import Fraction

from synth.network.rational import hurwitz

Polynomial = list[Fraction]  # highest power first


def decays_faster(polynomial: Polynomial, rate: Fraction) -> bool:
    """Whether every root has real part strictly below -rate."""
    return hurwitz(_shifted(polynomial, -rate))


def inside_disc(polynomial: Polynomial, radius: Fraction) -> bool:
    """Whether every root has magnitude strictly below ``radius`` > 0."""
    n = len(polynomial) - 1
    total = [Fraction(0)] * (n + 1)
    for k, value in enumerate(polynomial):
        # value * (w (q+1))^(n-k) * (q-1)^k
        term = [value * radius ** (n - k)]
        for _ in range(n - k):
            term = _times_linear(term, Fraction(1))
        for _ in range(k):
            term = _times_linear(term, Fraction(-1))
        total = [a + b for a, b in zip(total, term, strict=True)]
    return total[0] > 0 and hurwitz(total)  # total[0] is the polynomial at +radius


def _times_linear(polynomial: Polynomial, constant: Fraction) -> Polynomial:
    """polynomial * (q + constant)."""
    return [a + constant * b for a, b in zip([*polynomial, Fraction(0)], [Fraction(0), *polynomial], strict=True)]


def _shifted(polynomial: Polynomial, by: Fraction) -> Polynomial:
    """Coefficients of p(s + by), by repeated synthetic division."""
    work = list(polynomial)
    n = len(work)
    for end in range(n, 1, -1):
        for i in range(1, end):
            work[i] += by * work[i - 1]
    return work
