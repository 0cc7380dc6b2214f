"""Second-order jets: value, gradient and Hessian of a function of (x, y, z), carried through arithmetic.

A jet is a float64 array of ten numbers: value; d/dx, d/dy, d/dz; d2/dxx, xy, xz, yy, yz, zz. The rules are
those of forward automatic differentiation; no derivative of the metric is written out by hand.
"""

import math

import numpy as np
from numba import njit

__all__ = ["compose", "multiply", "power", "variable"]


@njit(cache=True)
def variable(value: float, axis: int) -> np.ndarray:
    """Return the jet of the coordinate `axis` (0, 1, 2) at `value`."""
    jet = np.zeros(10)
    jet[0] = value
    jet[1 + axis] = 1.0
    return jet


@njit(cache=True)
def multiply(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Return the jet of the product a b (Leibniz rule to second order)."""
    jet = a[0] * b + b[0] * a
    jet[0] = a[0] * b[0]
    k = 4
    for i in range(1, 4):
        for j in range(i, 4):
            jet[k] += a[i] * b[j] + a[j] * b[i]
            k += 1
    return jet


@njit(cache=True)
def compose(a: np.ndarray, value: float, first: float, second: float) -> np.ndarray:
    """Return the jet of F(a) from F, F' and F'' at the value of a (chain rule to second order)."""
    jet = first * a
    jet[0] = value
    k = 4
    for i in range(1, 4):
        for j in range(i, 4):
            jet[k] += second * a[i] * a[j]
            k += 1
    return jet


@njit(cache=True)
def power(a: np.ndarray, exponent: float) -> np.ndarray:
    """Return the jet of a**exponent for a positive (or exponent -1 and a not zero)."""
    value = 1.0 / a[0] if exponent == -1.0 else math.pow(a[0], exponent)
    first = exponent * value / a[0]
    return compose(a, value, first, (exponent - 1.0) * first / a[0])
