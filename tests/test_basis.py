"""Products of curves with Hermite functions, against closed forms, quadrature and plain loops."""

import math

import naive
import numpy as np
import pytest
from scipy import integrate, special

from mfeat.basis import LEVEL_RANGE, MAX_TERMS, TERMS, hermite_functions, project

LEVELS = np.linspace(*LEVEL_RANGE, 61)
ROOT = math.sqrt(math.pi)


def products(functional, curve, levels=LEVELS, terms=4):
    return project(functional, np.asarray(curve)[None], levels, terms)[0]


def test_functions_are_those_of_scipy():
    # scipy.special.eval_hermitenorm is He_k
    expected = [
        np.exp(-(LEVELS**2) / 2)
        * special.eval_hermitenorm(k, LEVELS)
        / math.sqrt(math.factorial(k))
        for k in range(MAX_TERMS)
    ]
    found = hermite_functions(LEVELS, MAX_TERMS)
    assert found == pytest.approx(np.array(expected), rel=1e-12, abs=1e-12)
    assert hermite_functions(LEVELS, 2) == pytest.approx(found[:2])


def test_functions_are_dual_to_the_polynomials():
    # integral of h_j He_k / sqrt(k!) = sqrt(2 pi) if j = k, else 0: orthonormality of the He_k
    # under the normal density (Abramowitz and Stegun 22.2.15, from memory), by scipy's quadrature
    for j in range(5):
        for k in range(5):

            def integrand(v, j=j, k=k):
                polynomial = naive.hermite_polynomial(k, v) / math.sqrt(math.factorial(k))
                return hermite_functions(np.array([v]), j + 1)[j, 0] * polynomial

            got = integrate.quad(integrand, -12, 12)[0]
            assert got == pytest.approx(math.sqrt(2 * math.pi) * (j == k), abs=1e-9)


@pytest.mark.parametrize("functional", TERMS)
def test_products_equal_plain_loops(functional):
    rng = np.random.default_rng(0)
    for levels in (np.linspace(-3, 3, 16), np.sort(rng.normal(size=9)), np.array([-1.0, 0.5])):
        curves = rng.random((2, 3, len(levels)))
        found = project(functional, curves, levels, 6)
        assert found.shape == (2, 3, 6)
        off = special.ndtr(-levels) if functional == "area" else 0.0
        for place in np.ndindex(2, 3):
            curve = (curves[place] - off).tolist()
            expected = naive.hermite_products(curve, levels.tolist(), 6)
            assert found[place] == pytest.approx(expected, rel=1e-12, abs=1e-13)


def test_gaussian_curves_in_closed_form():
    # area 1 - Phi(v), contour exp(-v^2/2), Euler v exp(-v^2/2) (Rice 1944/45; Adler 1981; Tomita
    # 1986). By hand from the moments of exp(-v^2): integral v^2 = sqrt(pi)/2, v^4 = 3 sqrt(pi)/4.
    # Products of equal parity overlap, those of the other one vanish.
    levels = np.linspace(-6, 6, 241)
    gauss = np.exp(-(levels**2) / 2)
    assert products("area", special.ndtr(-levels), levels) == pytest.approx(np.zeros(4), abs=1e-14)
    contour = [ROOT, 0.0, (ROOT / 2 - ROOT) / math.sqrt(2), 0.0]
    assert products("contour", gauss, levels) == pytest.approx(contour, abs=1e-9)
    euler = [0.0, ROOT / 2, 0.0, (3 * ROOT / 4 - 3 * ROOT / 2) / math.sqrt(6)]
    assert products("euler", levels * gauss, levels) == pytest.approx(euler, abs=1e-9)
    # within the range that levels have by default little is lost
    for functional, curve, expected in (
        ("contour", np.exp(-(LEVELS**2) / 2), contour),
        ("euler", LEVELS * np.exp(-(LEVELS**2) / 2), euler),
    ):
        assert products(functional, curve) == pytest.approx(expected, abs=0.003)


def test_weak_departures_show_in_their_own_term():
    # a curve of h_k adds its products alone; products are linear
    for k in range(4):
        more = 0.1 * hermite_functions(LEVELS, 4)[k]
        gauss = np.exp(-(LEVELS**2) / 2)
        change = products("contour", gauss + more) - products("contour", gauss)
        assert change == pytest.approx(products("contour", more), abs=1e-14)
        assert change[k] > 0.03


def test_the_number_of_levels_matters_little():
    def curve(v):
        return np.exp(-(v**2) / 2) * (1 + 0.3 * v - 0.2 * (v**2 - 1))

    expected = products("contour", curve(np.linspace(-3, 3, 601)), np.linspace(-3, 3, 601))
    for count in (16, 25, 61):
        levels = np.linspace(-3, 3, count)
        assert products("contour", curve(levels), levels) == pytest.approx(expected, abs=2e-4)


def test_one_level_and_none_of_the_curves_change_another():
    curves = np.random.default_rng(1).random((5, 7, 16))
    levels = np.linspace(-3, 3, 16)
    together = project("euler", curves, levels, 4)
    for place in np.ndindex(5, 7):
        assert np.array_equal(project("euler", curves[place][None], levels, 4)[0], together[place])
    # by hand: h_0(1) = exp(-1/2), and h_1(1) is the same
    single = project("contour", np.array([2.0]), np.array([1.0]), 2)
    assert single == pytest.approx(2 * math.exp(-0.5))
