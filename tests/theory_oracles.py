"""Closed-form expectations and test shapes, independent of the package under test.

Notation: the foreground at level ``u`` is the set where the field is ``>= u``; ``s`` is the
standard deviation of the field, ``tau`` the variance of its derivative along one axis; ``h, v, d,
a`` are the directions of a pixel pair: horizontal, vertical, diagonal (top left to bottom right)
and antidiagonal. Nothing is imported from the package.
Sources are cited from memory; every formula is checked by another road in ``test_oracles.py``.
"""

import math
from typing import Any, NamedTuple

import numpy as np
from scipy.special import ndtr, owens_t

Array = np.ndarray[Any, Any]
Real = Any  # a number, or an array of numbers where a docstring says "element by element"


class Functionals(NamedTuple):
    """Area, contour length and Euler number: totals of a shape, or densities of a texture."""

    area: Real
    contour: Real
    euler: Real


class LatticeFunctionals(NamedTuple):
    """Expectations per pixel on the unit square lattice."""

    area: Array
    contour: Array
    euler4: Array
    euler8: Array
    euler: Array


GAUSS_LEGENDRE = np.polynomial.legendre.leggauss(200)  # nodes and weights on -1..1


# Gaussian random fields ---------------------------------------------------------------------


def gaussian_continuum(u: Real, s: Real, tau: Real) -> Functionals:
    """Densities of the level sets of a smooth isotropic Gaussian field of mean 0 in the plane.

    Element by element in all arguments. With g = exp(-u^2/(2 s^2)):

    * area = 1 - Phi(u/s);
    * contour = sqrt(tau)/(2 s) g per unit area (S. O. Rice, "Mathematical analysis of random
      noise", Bell System Technical Journal 23 and 24, 1944/45, with the Cauchy-Crofton formula);
    * Euler number = tau u/((2 pi)^(3/2) s^3) g per unit area (R. J. Adler, "The Geometry of Random
      Fields", 1981; H. Tomita, Progress of Theoretical Physics 76, 1986).
    """
    u, s, tau = (np.asarray(value, dtype=float) for value in (u, s, tau))
    g = np.exp(-(u**2) / (2 * s**2))
    area = ndtr(-u / s)
    contour = np.sqrt(tau) / (2 * s) * g
    euler = tau * u / ((2 * math.pi) ** 1.5 * s**3) * g
    return Functionals(area, contour, euler)


def lattice_decorrelation(length: float) -> tuple[float, float, float]:
    """Return a, b, e = 2a - b for the covariance exp(-r^2/(2 length^2)) at unit pitch.

    1 - a is the correlation of axis neighbours (r = 1), 1 - b of diagonal neighbours (r^2 = 2).
    Written so that nothing cancels at large ``length``: b = 2a - a^2, e = a^2.
    """
    a = -math.expm1(-1 / (2 * length**2))
    return a, 2 * a - a**2, a**2


def pair_crossing(u: Array, c: float) -> Array:
    """P(just one of two unit normals of correlation 1 - c is >= u) = 4 T(u, sqrt(c/(2 - c))).

    T is the function of D. B. Owen, "Tables for computing bivariate normal probabilities", Annals
    of Mathematical Statistics 27 (1956), 1075-1090.
    """
    return 4 * owens_t(u, math.sqrt(c / (2 - c)))


def _euler4_lattice(u: Array, a: float, b: float, e: float) -> Array:
    """Expected chi4 per pixel: P(1 pixel) - 2 P(axis pair) + P(2x2 block), all >= u.

    R. L. Plackett, "A reduction formula for normal multivariate integrals", Biometrika 41 (1954),
    351-360: dP/drho_ij = phi2(u, u; rho_ij) P(the others >= u | both = u). The correlations 1 - a
    t (four axis pairs) and 1 - b t (two diagonals) run from t = 0, where all four pixels are one
    and chi4 = 0, to t = 1. With t = x^2 the integrand is smooth; Gauss-Legendre, 200 points.
    """
    node, weight = GAUSS_LEGENDRE
    total = np.zeros_like(u)
    for x, w in zip((node + 1) / 2, weight / 2, strict=True):
        t = x * x
        at, bt, et = a * t, b * t, e * t
        dt = 4 * at - bt - 2 * at**2
        # density of two pixels at (u, u): axis pair, diagonal pair
        density_axis = np.exp(-(u**2) / (2 - at)) / (2 * math.pi * math.sqrt(at * (2 - at)))
        density_diag = np.exp(-(u**2) / (2 - bt)) / (2 * math.pi * math.sqrt(bt * (2 - bt)))
        # P(the other two >= u) given that the two pixels are u
        h = u * math.sqrt(at * bt / ((2 - at) * dt))
        q = (2 * et - 2 * at**2 + at * bt) / (at * (4 - 2 * at - bt))
        others_axis = ndtr(-h) - 2 * owens_t(h, math.sqrt(q))
        h = u * et / math.sqrt((2 - bt) * dt)
        q = bt * (2 - bt) / (et * (4 - bt - 2 * at))
        others_diag = ndtr(-h) - 2 * owens_t(h, math.sqrt(q))
        rate = (
            2 * a * density_axis
            - 4 * a * density_axis * others_axis
            - 2 * b * density_diag * others_diag
        )
        total += w * 2 * x * rate
    return total


def gaussian_lattice(u: Real, length: float) -> LatticeFunctionals:
    """Exact expectations on the unit lattice: Gaussian field, mean 0, std 1, exp(-r^2/(2 l^2)).

    Element by element in ``u``. Per pixel (equally per window): area, four-direction contour
    length (pi/8)[Th + Tv + (Td + Ta)/sqrt2], Euler numbers chi4, chi8 and their mean. The
    continuum limit is ``gaussian_continuum(u, 1, 1/length^2)``.
    """
    u = np.asarray(u, dtype=float)
    a, b, e = lattice_decorrelation(length)
    area = ndtr(-u)
    axis = pair_crossing(u, a)
    diagonal = pair_crossing(u, b)
    contour = math.pi / 8 * (2 * axis + 2 * diagonal / math.sqrt(2))
    euler4 = _euler4_lattice(u, a, b, e)
    euler8 = -_euler4_lattice(-u, a, b, e)
    return LatticeFunctionals(area, contour, euler4, euler8, (euler4 + euler8) / 2)


# White noise --------------------------------------------------------------------------------


def white_noise(p: Real) -> dict[str, Real]:
    """Expectations per 2x2 window for independent pixels, foreground with probability p.

    Keys: q0, q1, q2, qd, q3, q4 (class probabilities), h, v, d, a (crossings per direction), area,
    chi4, chi8. Polynomials in p, so exact if p is a Fraction; element by element for arrays.
    Binomial counting of the patterns of Gray (1971).
    """
    q = 1 - p
    return {
        "q0": q**4,
        "q1": 4 * p * q**3,
        "q2": 4 * p**2 * q**2,
        "qd": 2 * p**2 * q**2,
        "q3": 4 * p**3 * q,
        "q4": p**4,
        "h": 2 * p * q,
        "v": 2 * p * q,
        "d": 2 * p * q,
        "a": 2 * p * q,
        "area": p,
        "chi4": p - 2 * p**2 + p**4,
        "chi8": -(q - 2 * q**2 + q**4),
    }


# Boolean model ------------------------------------------------------------------------------


def boolean_model(intensity: Real, mean_area: Real, mean_perimeter: Real) -> Functionals:
    """Densities of the Boolean model of convex, isotropic grains in the plane.

    area = p = 1 - exp(-lam EA), contour = lam EU (1 - p), Euler number = (1 - p)(lam - (lam EU)^2/
    (4 pi)). R. E. Miles, "Estimating aggregate and overall characteristics from thick sections by
    transmission microscopy", Journal of Microscopy 107 (1976), 227-233; also S. N. Chiu, D.
    Stoyan, W. S. Kendall, J. Mecke, "Stochastic Geometry and its Applications", 2013 (from
    memory).
    """
    uncovered = np.exp(-np.asarray(intensity * mean_area, dtype=float))
    edge = intensity * mean_perimeter
    return Functionals(
        1 - uncovered,
        edge * uncovered,
        uncovered * (intensity - edge**2 / (4 * math.pi)),
    )


def boolean_intensity_corrected(chi: Real, contour: Real, p: Real, corner_bias: Real = 0.0) -> Real:
    """Grain intensity by the method of densities, for measured densities chi, contour and area p.

    lam = chi/(1 - p) + (1 - 4 b) S^2/(4 pi) with S = contour/(1 - p). b is the mean error of the
    measured Euler number per concave corner, where the corners have the density (1 - p) S^2/pi;
    b = 0 is the continuum formula (Miles 1976). On a square lattice the measured b is about -0.013
    for chi4, -0.041 for the mean of chi4 and chi8, and -0.068 for chi8 (found by simulation, not
    published).
    """
    s = contour / (1 - p)
    return chi / (1 - p) + (1 - 4 * corner_bias) * s**2 / (4 * math.pi)


# Contour length on the lattice --------------------------------------------------------------


class DirectionWeights(NamedTuple):
    """For one direction of pixel pairs: angle, share of all directions, spacing of its lines."""

    angle: float
    weight: float
    spacing: float


def rectangular_weights(dx: float, dy: float) -> dict[str, DirectionWeights]:
    """Cauchy-Crofton weights of the directions h, v, d, a on a lattice of pitch dx (columns), dy.

    contour = (pi/2) sum_k weight_k spacing_k T_k, T_k the number of crossings in direction k. Each
    direction stands for the sector of angles nearest to it (sectors end half way between
    neighbouring directions); the spacing is that of the parallel lattice lines, dx dy over the
    distance of the two pixels. Angles run clockwise from +x, as rows run downwards. J. Serra,
    "Image Analysis and Mathematical Morphology", 1982; J. Ohser, F. Muecklich, "Statistical
    Analysis of Microstructures in Materials Science", 2000.
    """
    alpha = math.atan2(dy, dx)
    diagonal = math.hypot(dx, dy)
    return {
        "h": DirectionWeights(0.0, alpha / math.pi, dy),
        "v": DirectionWeights(math.pi / 2, 1 / 2 - alpha / math.pi, dx),
        "d": DirectionWeights(alpha, 1 / 4, dx * dy / diagonal),
        "a": DirectionWeights(math.pi - alpha, 1 / 4, dx * dy / diagonal),
    }


def straight_edge_ratio(normal_angle: Real, dx: float = 1.0, dy: float = 1.0) -> Real:
    """Estimated over true length of a long straight edge, for the four-direction estimator.

    A straight edge whose normal has the angle t crosses lattice lines of direction t_k |cos(t -
    t_k)|/spacing_k times per unit length, so the ratio is (pi/2) sum_k weight_k |cos(t - t_k)|.
    """
    total = np.zeros_like(np.asarray(normal_angle, dtype=float))
    for direction in rectangular_weights(dx, dy).values():
        total = total + direction.weight * np.abs(np.cos(normal_angle - direction.angle))
    return math.pi / 2 * total


# Shapes -------------------------------------------------------------------------------------


def disc(radius: float) -> Functionals:
    """Area, perimeter and Euler number of a disc."""
    return Functionals(math.pi * radius**2, 2 * math.pi * radius, 1)


def annulus(outer: float, inner: float) -> Functionals:
    """Area, perimeter and Euler number of the ring between two concentric circles."""
    return Functionals(math.pi * (outer**2 - inner**2), 2 * math.pi * (outer + inner), 0)


def framed_square(n: int) -> dict[str, float]:
    """Lattice totals of a solid n x n square of unit pixels surrounded by background.

    Each of the n rows and n columns is crossed twice, and each of the 2n - 1 diagonals and 2n - 1
    antidiagonals, so L2 = pi n and L4 = (pi/2)(n + (2n - 1)/sqrt2). Keys: area, edges (pixel
    sides), L2, L4, chi4, chi8.
    """
    return {
        "area": n * n,
        "edges": 4 * n,
        "L2": math.pi * n,
        "L4": math.pi / 2 * (n + (2 * n - 1) / math.sqrt(2)),
        "chi4": 1,
        "chi8": 1,
    }


def _pixel_centres(shape: tuple[int, int], dy: float, dx: float) -> tuple[Array, Array]:
    """Return y (a column) and x (a row): pixel (i, j) has its centre at y = i dy, x = j dx."""
    rows, cols = shape
    return np.arange(rows)[:, None] * dy, np.arange(cols)[None, :] * dx


def digitise_disc(
    radius: float,
    centre: tuple[float, float],
    shape: tuple[int, int],
    dy: float = 1.0,
    dx: float = 1.0,
) -> Array:
    """Boolean image: True where the pixel centre (i dy, j dx) is within radius of centre (y, x).

    Radius and centre have the unit of dy and dx.
    """
    y, x = _pixel_centres(shape, dy, dx)
    return (y - centre[0]) ** 2 + (x - centre[1]) ** 2 <= radius**2


def digitise_annulus(
    outer: float,
    inner: float,
    centre: tuple[float, float],
    shape: tuple[int, int],
    dy: float = 1.0,
    dx: float = 1.0,
) -> Array:
    """Boolean image of a ring: the disc of radius outer without the disc of radius inner."""
    whole = digitise_disc(outer, centre, shape, dy, dx)
    return whole & ~digitise_disc(inner, centre, shape, dy, dx)


def half_plane(
    angle: float, offset: float, shape: tuple[int, int], dy: float = 1.0, dx: float = 1.0
) -> Array:
    """Boolean image: True where x cos(angle) + y sin(angle) <= offset at the pixel centre."""
    y, x = _pixel_centres(shape, dy, dx)
    return x * math.cos(angle) + y * math.sin(angle) <= offset
