"""Curves in few numbers: projections on Hermite functions.

Over levels v, in standard deviations from a field's mean, the curves of a Gaussian field are one
term each: the area is 1 - Phi(v), the contour follows exp(-v^2/2) and the Euler number
v exp(-v^2/2) (Rice 1944/45; Adler 1981; Tomita 1986). Weak departures from it add Hermite
polynomials (T. Matsubara, Statistics of smoothed cosmic fields in perturbation theory I, Astrophys.
J. 584 (2003), 1-33). So the area, with 1 - Phi taken off, and the other curves are described by
their products with the functions h_k(v) = exp(-v^2/2) He_k(v) / sqrt(k!), He_k the probabilists'
Hermite polynomials: few numbers, each an average over many levels, in place of many noisy ones.
Products with h_k, which fall off with v as curves do, are not coefficients of the series (those
would be products with the polynomials, which far, noisy levels rule): neighbours of equal parity
overlap.
"""

import math
from functools import lru_cache

import numpy as np
from numpy.polynomial.hermite_e import hermeval
from scipy.special import ndtr

from mfeat._checks import read_only

#: Functionals of the vector in their order, with the number of Hermite functions that each gets by
#: default: an even one more tells little.
TERMS = {"area": 4, "contour": 2, "euler": 4, "anisotropy": 3}

#: Range of the levels by which curves are integrated, where none is given.
LEVEL_RANGE = (-3.0, 3.0)

#: Largest number of Hermite functions.
MAX_TERMS = 16


def hermite_functions(levels: np.ndarray, terms: int) -> np.ndarray:
    """Return h_0 to h_(terms - 1) at levels, an array (terms, T).

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.basis import hermite_functions
    >>> hermite_functions(np.array([0.0, 1.0]), 3).round(3)
    array([[ 1.   ,  0.607],
           [ 0.   ,  0.607],
           [-0.707,  0.   ]])
    """
    weight = np.exp(-np.square(levels) / 2)
    rows = [
        weight * hermeval(levels, [0.0] * k + [1.0]) / math.sqrt(math.factorial(k))
        for k in range(terms)
    ]
    return np.array(rows).reshape(terms, len(levels))


@lru_cache(maxsize=256)
def _weights(levels: bytes, terms: int) -> np.ndarray:
    """Return what each level counts in the integrals over v, by the trapezium rule."""
    v = np.frombuffer(levels)
    step = np.gradient(v) if len(v) > 1 else np.ones(1)
    step[[0, -1]] /= 2 if len(v) > 1 else 1
    return read_only(hermite_functions(v, terms) * step)


def project(functional: str, curves: np.ndarray, levels: np.ndarray, terms: int) -> np.ndarray:
    """Return integrals over v of curves (..., T) times h_0, h_1, ...: an array (..., terms).

    Of the area 1 - Phi(v) is taken off first.
    """
    if functional == "area":
        curves = curves - ndtr(-levels)
    weights = _weights(levels.tobytes(), terms)
    # no matrix product: its last bit would depend on the number of curves
    return np.stack([(curves * row).sum(axis=-1) for row in weights], axis=-1)
