"""What panels are drawn from: textures, defect marks, and the sensor that measures them.

All lengths and heights are micrometres, and everything but the sensor is a function of position,
so that any pitch samples the same surface. Shapes and sizes are invented for the demonstration.
"""

import math
from collections.abc import Callable

import numpy as np
from numpy.random import Generator

PER_MM2 = 1e-6  # one per square millimetre, in one per square micrometre


class Grid:
    """Pixel centres of a panel, micrometres, with the origin in its first corner."""

    def __init__(self, shape: tuple[int, int], pitch: float) -> None:
        self.shape, self.pitch = shape, pitch
        self.sides = np.array(shape) * pitch
        self.y, self.x = ((np.arange(count) + 0.5) * pitch for count in shape)


# A mark is its reach and its profile, a function of the row and column offsets from its centre.
Profile = Callable[[np.ndarray, np.ndarray], np.ndarray]
Mark = tuple[float, Profile]
Draw = Callable[[Generator], Mark]


def scatter(rng: Generator, grid: Grid, density: float, margin: float, draw: Draw) -> np.ndarray:
    """Sum marks whose centres are a Poisson process on the grid enlarged by `margin`."""
    total = np.zeros(grid.shape)
    sides = grid.sides + 2.0 * margin
    for cy, cx in rng.random((rng.poisson(density * sides[0] * sides[1]), 2)) * sides - margin:
        reach, profile = draw(rng)
        rows = slice(*np.searchsorted(grid.y, (cy - reach, cy + reach)))
        columns = slice(*np.searchsorted(grid.x, (cx - reach, cx + reach)))
        total[rows, columns] += profile((grid.y[rows] - cy)[:, None], (grid.x[columns] - cx)[None])
    return total


def wave_sum(rng: Generator, grid: Grid, wave_numbers: np.ndarray) -> np.ndarray:
    """Unit-variance sum of plane waves; `wave_numbers` is (2, n), radians per micrometre."""
    count = wave_numbers.shape[1]
    phase_y = np.outer(grid.y, wave_numbers[0]) + rng.uniform(0.0, 2.0 * math.pi, count)
    phase_x = np.outer(wave_numbers[1], grid.x)
    # cos(a + b) split into products: two matrix products instead of `count` images.
    total = np.cos(phase_y) @ np.cos(phase_x) - np.sin(phase_y) @ np.sin(phase_x)
    return math.sqrt(2.0 / count) * total


def texture(rng: Generator, grid: Grid) -> np.ndarray:
    coarse = rng.uniform(0.6, 1.1), log_uniform(rng, 110.0, 200.0)
    fine = rng.uniform(0.15, 0.35), log_uniform(rng, 18.0, 35.0)
    height = np.zeros(grid.shape)
    # So many waves that no single one shows; the fine texture has more cells to fill.
    for (amplitude, length), waves in ((coarse, 384), (fine, 1024)):
        wave_numbers = rng.normal(scale=1.0 / length, size=(2, waves))
        height += amplitude * wave_sum(rng, grid, wave_numbers)
    return height


def orange_peel(rng: Generator, grid: Grid) -> np.ndarray:
    amplitude = rng.uniform(3.0, 5.5)
    typical = log_uniform(rng, 1200.0, 1900.0)
    number = 2.0 * math.pi / (typical * rng.uniform(0.8, 1.5, 96))
    angle = rng.uniform(0.0, math.pi, 96)
    return amplitude * wave_sum(rng, grid, number * np.array([np.sin(angle), np.cos(angle)]))


def _pinhole(rng: Generator) -> Mark:
    """Draw a gas hole: steep flank, flat ground, every other one with a small rim."""
    radius, depth = log_uniform(rng, 15.0, 50.0), log_uniform(rng, 2.5, 16.0)
    rim = rng.uniform(0.08, 0.25) * rng.integers(2)

    def profile(dy: np.ndarray, dx: np.ndarray) -> np.ndarray:
        rho = np.hypot(dy, dx) / radius
        return depth * (rim * np.exp(-(((rho - 1.6) / 0.4) ** 2)) - np.exp(-(rho**4)))

    return 3.0 * radius, profile


def _crater(rng: Generator) -> Mark:
    """Draw a wide bowl of repelled coat, whose material lies in the rim around it."""
    radius, depth = log_uniform(rng, 150.0, 600.0), log_uniform(rng, 2.0, 9.0)
    sharpness, stretch = rng.uniform(0.3, 0.6), rng.uniform(0.85, 1.18)

    def profile(dy: np.ndarray, dx: np.ndarray) -> np.ndarray:
        rho = np.hypot(dy * stretch, dx) / radius
        # The third power: flatter ground and a narrower rim than a scratch has.
        return -depth * groove_section(rho**3, sharpness)

    return 2.5 * radius, profile


def _scratch(rng: Generator) -> Mark:
    """Draw a handling mark: a groove with thrown-up ridges, of varying depth along its way."""
    half_length, half_width = log_uniform(rng, 500.0, 3000.0), log_uniform(rng, 10.0, 30.0)
    depth, sharpness = log_uniform(rng, 0.8, 4.5), rng.uniform(0.3, 0.6)
    waves, phase = rng.uniform(0.5, 2.5), rng.uniform(0.0, 2.0 * math.pi)

    def section(along: np.ndarray, across: np.ndarray) -> np.ndarray:
        pressure = (1.0 - along**4) * (1.0 + 0.4 * np.cos(math.pi * waves * along + phase))
        return -depth * pressure * groove_section(across**2, sharpness)

    return bent_line(rng, half_length, half_width, section)


def _inclusion(rng: Generator) -> Mark:
    """Draw a bump over dirt under the coat: long over a fibre, round over dust."""
    if rng.random() < 0.35:
        rise = log_uniform(rng, 1.0, 5.0)
        half_length, half_width = log_uniform(rng, 120.0, 450.0), log_uniform(rng, 15.0, 35.0)

        def section(along: np.ndarray, across: np.ndarray) -> np.ndarray:
            return rise * (1.0 - along**4) * np.exp(-(across**2))

        return bent_line(rng, half_length, half_width, section)
    radius, rise = log_uniform(rng, 25.0, 110.0), log_uniform(rng, 1.5, 9.0)
    stretch = rng.uniform(0.75, 1.33)
    return 4.0 * radius, lambda dy, dx: rise * np.exp(-((dy * stretch) ** 2 + dx**2) / radius**2)


# Least and greatest density per mm^2, margin in micrometres (the farthest reach), and the mark.
LOCALISED: dict[str, tuple[float, float, float, Draw]] = {
    "pinholes": (1.5, 4.5, 150.0, _pinhole),
    "craters": (0.35, 0.9, 1500.0, _crater),
    "scratches": (0.25, 0.6, 3200.0, _scratch),
    "inclusions": (1.2, 3.6, 600.0, _inclusion),
}


def groove_section(distance: np.ndarray, sharpness: float) -> np.ndarray:
    """Return a section 1 in the middle, 0 at distance 1, with a rim of the other sign outside."""
    return (1.0 - distance) * np.exp(-sharpness * distance**2)


def bent_line(rng: Generator, half_length: float, half_width: float, section: Profile) -> Mark:
    """Mark along a slightly bent line of random direction.

    `section` takes the position along the line (-1 to 1) and across it in half widths.
    """
    angle = rng.uniform(0.0, math.pi)
    bow = rng.uniform(-0.12, 0.12) * half_length

    def profile(dy: np.ndarray, dx: np.ndarray) -> np.ndarray:
        along = (math.cos(angle) * dx + math.sin(angle) * dy) / half_length
        across = (math.cos(angle) * dy - math.sin(angle) * dx - bow * along**2) / half_width
        # Most pixels of a long line's window are far from it.
        near = (np.abs(along) < 1.0) & (np.abs(across) < 4.0)
        change = np.zeros(along.shape)
        change[near] = section(along[near], across[near])
        return change

    return half_length + 4.0 * half_width, profile


def measured(rng: Generator, surface: np.ndarray, grid: Grid) -> np.ndarray:
    """Return the surface as an optical sensor reports it, on a bent and tilted panel."""
    angle = rng.uniform(0.0, math.pi)
    # Radius 0.1-0.6 m: 5 to 33 um from the middle of a 5 mm panel to its edge.
    curvature = rng.choice([-1.0, 1.0]) / log_uniform(rng, 1e5, 6e5)
    saddle = rng.choice([0.0, rng.uniform(0.3, 1.0)])
    slope_y, slope_x = rng.uniform(-0.003, 0.003, 2)
    dy, dx = (grid.y - 0.5 * grid.sides[0])[:, None], (grid.x - 0.5 * grid.sides[1])[None]
    u = math.cos(angle) * dx + math.sin(angle) * dy
    v = math.cos(angle) * dy - math.sin(angle) * dx
    form = 0.5 * curvature * (u**2 - saddle * v**2) + slope_y * dy + slope_x * dx

    def cluster(rng: Generator) -> Mark:
        radius = log_uniform(rng, 20.0, 60.0)
        return 1.5 * radius, lambda dy, dx: np.exp(-(((dy**2 + dx**2) / radius**2) ** 2))

    # Chance of losing a pixel: anywhere, on steep flanks, and in clusters.
    loss = rng.uniform(0.004, 0.008) + scatter(rng, grid, 0.25 * PER_MM2, 90.0, cluster)
    steepness = np.hypot(*np.gradient(surface, grid.pitch))
    loss -= 0.5 * np.expm1(-((steepness / 0.4) ** 2))
    measured = surface + form + rng.normal(scale=rng.uniform(0.1, 0.2), size=grid.shape)
    measured[rng.random(grid.shape) < loss] = np.nan
    return measured


def log_uniform(rng: Generator, lo: float, hi: float) -> float:
    """Uniform in the logarithm: small sizes are more common than large ones."""
    return math.exp(rng.uniform(math.log(lo), math.log(hi)))
