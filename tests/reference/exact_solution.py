"""Least squares by rational numbers and by mpmath: what the float64 answers are judged against."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from mpmath import mp, mpf

from dunhamfit.algebra.extended import Extended


def extended_of(values) -> Extended:
    """Rational numbers of any nesting as high + low, to 106 bits."""
    array = np.array(values, dtype=object)
    high = np.array([float(value) for value in array.flat]).reshape(array.shape)
    low = np.array([float(value - Fraction(h)) for value, h in zip(array.flat, high.flat, strict=True)])
    return Extended(high, low.reshape(array.shape))


def as_fraction(value: Extended) -> np.ndarray:
    """The exact value of every entry, an object array."""
    flat = [Fraction(h) + Fraction(l) for h, l in zip(value.high.flat, value.low.flat, strict=True)]
    made = np.empty(value.high.shape, dtype=object)
    made.flat = flat
    return made


def least_squares(matrix, observed, sigma) -> tuple[np.ndarray, np.ndarray]:
    """Solution and covariance of the rows, through 80-digit normal equations.

    Parameters
    ----------
    matrix : (n, p), observed, sigma : (n,), of Fraction or float, which are taken at their exact value

    Returns
    -------
    values : ndarray of mpf, shape (p,)
    covariance : ndarray of mpf, shape (p, p)
    """
    matrix, observed = np.array(matrix, dtype=object), np.array(observed, dtype=object)
    with mp.workdps(80):
        matrix = np.vectorize(_mpf, otypes=[object])(matrix)
        observed = np.vectorize(_mpf, otypes=[object])(observed)
        weight = np.array([1 / _mpf(value) ** 2 for value in sigma], dtype=object)
        weighted = matrix.T * weight
        return solved(weighted @ matrix, weighted @ observed)


def solved(gram: np.ndarray, right: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Solution and inverse of symmetric positive definite equations, columns scaled first."""
    count = len(right)
    scale = [1 / mp.sqrt(gram[i, i]) for i in range(count)]
    scaled = mp.matrix(count)
    for i in range(count):
        for j in range(count):
            scaled[i, j] = gram[i, j] * scale[i] * scale[j]
    inverse = scaled**-1
    covariance = np.array(
        [[inverse[i, j] * scale[i] * scale[j] for j in range(count)] for i in range(count)], dtype=object
    )
    return covariance @ right, covariance


def _mpf(value) -> mpf:
    value = Fraction(value)
    return mpf(value.numerator) / mpf(value.denominator)
