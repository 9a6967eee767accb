"""Seeded synthetic surfaces with known truth.

Three kinds: height maps of powder-coated panels with and without defects
(`simulate_panel`), periodic Gaussian fields whose lattice covariance is exact
(`gaussian_field`), and unions of random discs with closed-form densities
(`boolean_discs`). The same arguments always give the same surface.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.random import PCG64, Generator, SeedSequence

from mfeat import _checks, _marks

PANEL_CONDITIONS = ("sound", "orange_peel", "pinholes", "craters", "scratches", "inclusions")
"""Conditions `simulate_panel` knows; a condition's position is its value in `Panel.truth`."""

TRUTH_THRESHOLD = 0.25
"""Height change, in micrometres, above which a pixel counts as part of a localised defect.

About one standard deviation of the fine texture and the sensor noise together: a
smaller change is not visible in a single pixel.
"""

_RESOLUTION_DECIMALS = 3  # the sensor reports whole nanometres
_SMALLEST_SIDE = 16


@dataclass(frozen=True, eq=False)
class Panel:
    """One synthetic height map and what is known about it.

    Attributes
    ----------
    height : ndarray of float32, shape (rows, columns)
        Height in micrometres, NaN where the sensor lost the pixel.
    truth : ndarray of uint8, shape (rows, columns)
        0 where the surface is sound, otherwise the position of `condition` in
        `PANEL_CONDITIONS`. Known for lost pixels too.
    condition : str
        One of `PANEL_CONDITIONS`.
    seed : int
        Seed the panel was drawn with.
    pitch : float
        Side of one (square) pixel in micrometres.

    Examples
    --------
    >>> panel = simulate_panel("sound", seed=3, shape=(64, 48), nuisance=False)
    >>> panel.height.shape, str(panel.height.dtype), int(panel.truth.max())
    ((64, 48), 'float32', 0)
    """

    height: np.ndarray
    truth: np.ndarray
    condition: str
    seed: int
    pitch: float


@dataclass(frozen=True, eq=False)
class BooleanModel:
    """A drawn union of random grains and the densities expected of it.

    The three densities are those of the continuous plane, after Miles (1976),
    "Estimating aggregate and overall characteristics from thick sections by
    transmission microscopy", with edge length and area in pixels. A lattice image
    keeps a bias in the Euler density that finer pixels do not remove.

    Attributes
    ----------
    image : ndarray of bool, shape (rows, columns)
        True where the pixel's centre is covered by at least one grain.
    intensity : float
        Expected number of grain centres per square pixel.
    mean_area : float
        Expected area of one grain, square pixels.
    mean_perimeter : float
        Expected perimeter of one grain, pixels.

    Examples
    --------
    >>> model = boolean_discs((64, 64), 0.002, (5, 10), seed=1)
    >>> round(model.area_fraction, 4), round(model.contour_density, 4)
    (0.3069, 0.0653)
    """

    image: np.ndarray
    intensity: float
    mean_area: float
    mean_perimeter: float

    @property
    def area_fraction(self) -> float:
        """Expected covered fraction, 1 - exp(-intensity * mean_area); no unit."""
        return -math.expm1(-self.intensity * self.mean_area)

    @property
    def contour_density(self) -> float:
        """Expected contour length per unit area, one per pixel."""
        return self.intensity * self.mean_perimeter * (1.0 - self.area_fraction)

    @property
    def euler_density(self) -> float:
        """Expected Euler number per unit area, one per square pixel."""
        per_grain_overlap = (self.intensity * self.mean_perimeter) ** 2 / (4.0 * math.pi)
        return (1.0 - self.area_fraction) * (self.intensity - per_grain_overlap)


def simulate_panel(
    condition: str,
    seed: int,
    shape: tuple[int, int] = (512, 512),
    pitch: float = 10.0,
    *,
    severity: float = 1.0,
    nuisance: bool = True,
) -> Panel:
    """Draw the height map of one powder-coated panel.

    Texture, defects, form and tilt are functions of position in micrometres,
    sampled at the pixel centres ``((row + 0.5) * pitch, (column + 0.5) * pitch)``:
    another pitch over the same physical size samples the same surface. Only sensor
    noise and lost pixels belong to the pixel. Texture, defects and nuisances have
    random streams of their own, and every condition has streams of its own, so
    panels of different conditions with one seed share nothing.

    Parameters
    ----------
    condition : str
        One of `PANEL_CONDITIONS`:

        - "sound": coarse texture (0.6-1.1 um, correlation length 110-200 um) and
          fine texture (0.15-0.35 um, 18-35 um); every panel draws its own values.
          All other conditions lie on such a texture.
        - "orange_peel": waviness over the whole panel, 1-3 mm long, 3-5.5 um.
        - "pinholes": steep holes 30-100 um across, some with a small rim.
        - "craters": shallow bowls 0.3-1.2 mm across with raised rims.
        - "scratches": grooves with ridges, 1-6 mm long, slightly bent, of varying depth.
        - "inclusions": bumps over dust (round) and fibres (elongated).

        The number of localised defects is Poisson with a density per mm^2 drawn per
        panel, so a small panel may have none.
    seed : int
        0 or above.
    shape : tuple of int, default (512, 512)
        Rows and columns, 16 or more each.
    pitch : float, default 10.0
        Side of a square pixel in micrometres, 0.01 to 10,000.
    severity : float, default 1.0
        Factor on every defect's height or depth, above 0, up to 1000; a sound panel
        ignores it.
    nuisance : bool, default True
        Add form (cylinder or saddle), tilt, white sensor noise (0.1-0.2 um) and lost
        pixels (about 0.5-2 % at severity 1, more of them on steep flanks). Texture,
        defects and truth are the same with and without.

    Returns
    -------
    Panel
        Heights are multiples of 0.001 um, before conversion to float32. Truth is set
        where the defects change the height by more than `TRUTH_THRESHOLD`; orange peel
        has no outline, so there truth is set everywhere.

    Raises
    ------
    TypeError, ValueError
        If a parameter has the wrong type or an illegal value.

    Notes
    -----
    Textures are sums of waves with random direction, length and phase (Shinozuka and
    Jan, 1972, "Digital simulation of random processes and its applications"), because
    such a sum can be sampled at any pitch.

    Examples
    --------
    >>> panel = simulate_panel("craters", seed=17, shape=(96, 96))
    >>> sorted({PANEL_CONDITIONS[int(value)] for value in np.unique(panel.truth)})
    ['craters', 'sound']
    """
    if not isinstance(condition, str) or condition not in PANEL_CONDITIONS:
        raise ValueError(f"condition must be one of {PANEL_CONDITIONS}; got {condition!r}")
    seed = _checked_seed(seed)
    shape = _checked_shape(shape)
    pitch = _checks.real("pitch", pitch, minimum=0.01, maximum=1e4)
    severity = _checks.real("severity", severity, above=0.0, maximum=1e3)
    if not isinstance(nuisance, bool | np.bool_):
        raise TypeError(f"nuisance must be True or False; got {nuisance!r}")

    code = PANEL_CONDITIONS.index(condition)
    # The condition enters as a spawn key: it cannot collide with any seed, however large.
    streams = SeedSequence(seed, spawn_key=(code,)).spawn(3)
    texture_rng, defect_rng, nuisance_rng = (Generator(PCG64(stream)) for stream in streams)
    grid = _marks.Grid(shape, pitch)
    height = _marks.texture(texture_rng, grid)
    truth = np.zeros(shape, dtype=np.uint8)
    if condition == "orange_peel":
        height += severity * _marks.orange_peel(defect_rng, grid)
        truth[...] = code
    elif condition != "sound":
        least, most, margin, draw = _marks.LOCALISED[condition]
        density = _marks.log_uniform(defect_rng, least, most) * _marks.PER_MM2
        change = severity * _marks.scatter(defect_rng, grid, density, margin, draw)
        height += change
        truth[np.abs(change) > TRUTH_THRESHOLD] = code
    if nuisance:
        height = _marks.measured(nuisance_rng, height, grid)
    # Rounding hides the last bits, in which mathematical libraries differ.
    height = np.round(height, _RESOLUTION_DECIMALS).astype(np.float32)
    return Panel(height, truth, condition, seed, pitch)


def gaussian_field(
    shape: tuple[int, int], correlation_length: float, seed: int, *, std: float = 1.0
) -> np.ndarray:
    """Draw a periodic Gaussian field with covariance std^2 exp(-r^2 / (2 l^2)).

    White noise is filtered with the square root of the discrete Fourier transform of
    the periodised lattice covariance, so the covariance is exact on the lattice, not
    only in the limit of fine pixels (circulant embedding: Wood and Chan, 1994;
    Dietrich and Newsam, 1997).

    Parameters
    ----------
    shape : tuple of int
        Rows and columns, 16 or more and at least 8 correlation lengths each.
    correlation_length : float
        The l of the covariance, pixels, 0.1 or above.
    seed : int
        0 or above.
    std : float, default 1.0
        Standard deviation of the field, any unit, 1e-100 to 1e100.

    Returns
    -------
    ndarray of float64, shape `shape`
        Mean 0 in expectation; rows and columns wrap round.

    Raises
    ------
    TypeError, ValueError
        If a parameter has the wrong type or an illegal value, or `shape` is below 8
        correlation lengths: wrapped copies of the covariance would not be negligible.

    Examples
    --------
    >>> field = gaussian_field((64, 128), correlation_length=4.0, seed=7, std=2.0)
    >>> field.shape, bool(1.5 < field.std() < 2.5)
    ((64, 128), True)
    """
    shape = _checked_shape(shape)
    length = _checks.real("correlation_length", correlation_length, minimum=0.1)
    rng = Generator(PCG64(SeedSequence(_checked_seed(seed))))
    std = _checks.real("std", std, minimum=1e-100, maximum=1e100)
    if min(shape) < 8.0 * length:
        raise ValueError(
            f"shape must be at least 8 correlation lengths ({8.0 * length:g} pixels) on each "
            f"side; got {shape} with correlation_length={length:g}"
        )
    # The covariance is a product of a row and a column term, and so is its transform.
    gain = np.outer(_periodic_gain(shape[0], length), _periodic_gain(shape[1], length))
    noise = scipy.fft.rfft2(rng.normal(scale=std, size=shape))
    return scipy.fft.irfft2(noise * gain[:, : noise.shape[1]], s=shape)


def boolean_discs(
    shape: tuple[int, int], intensity: float, radius_range: tuple[float, float], seed: int
) -> BooleanModel:
    """Draw a Boolean model: the union of discs whose centres are a Poisson process.

    Centres fall on the window enlarged by the largest radius, so that the window's
    edge shows no thinning. A pixel belongs to a disc when its centre does.

    Parameters
    ----------
    shape : tuple of int
        Rows and columns, 16 or more each.
    intensity : float
        Expected number of centres per square pixel, above 0.
    radius_range : tuple of float
        Smallest and largest radius in pixels, ``0 < lo <= hi``; radii are uniform
        between them.
    seed : int
        0 or above.

    Returns
    -------
    BooleanModel
        The image, and the densities expected of it.

    Raises
    ------
    TypeError, ValueError
        If a parameter has the wrong type or an illegal value.

    Examples
    --------
    >>> model = boolean_discs((64, 64), 0.002, (5, 5), seed=1)
    >>> model.image.shape, bool(model.mean_area == math.pi * 25)
    ((64, 64), True)
    """
    shape = _checked_shape(shape)
    intensity = _checks.real("intensity", intensity, above=0.0)
    lo, hi = _checked_radii(radius_range)
    rng = Generator(PCG64(SeedSequence(_checked_seed(seed))))

    def disc(rng: Generator) -> _marks.Mark:
        radius = rng.uniform(lo, hi)
        return radius, lambda dy, dx: dy * dy + dx * dx <= radius * radius

    image = _marks.scatter(rng, _marks.Grid(shape, 1.0), intensity, hi, disc) > 0
    mean_square_radius = (lo * lo + lo * hi + hi * hi) / 3.0
    return BooleanModel(image, intensity, math.pi * mean_square_radius, math.pi * (lo + hi))


def _periodic_gain(count: int, length: float) -> np.ndarray:
    """Square root of the transform of one axis's covariance, wrapped round `count` pixels."""
    lag = np.arange(count)
    # At most 1/8 of the side, the length lets copies beyond the neighbours vanish.
    wrapped = sum(np.exp(-0.5 * ((lag + turn * count) / length) ** 2) for turn in (-2, -1, 0, 1))
    # The true transform is positive; rounding can leave its smallest values below zero.
    return np.sqrt(np.clip(scipy.fft.fft(wrapped).real, 0.0, None))


def _checked_seed(seed: int) -> int:
    return _checks.integer("seed", seed, minimum=0)


def _checked_shape(shape: Sequence[int]) -> tuple[int, int]:
    if not isinstance(shape, tuple | list) or len(shape) != 2:
        raise ValueError(f"shape must be two integers (rows, columns); got {shape!r}")
    rows, cols = (
        _checks.integer(f"shape[{k}]", side, minimum=_SMALLEST_SIDE) for k, side in enumerate(shape)
    )
    return rows, cols


def _checked_radii(radius_range: Sequence[float]) -> tuple[float, float]:
    if not isinstance(radius_range, tuple | list) or len(radius_range) != 2:
        raise ValueError(f"radius_range must be two numbers (lo, hi); got {radius_range!r}")
    lo, hi = (_checks.real(f"radius_range[{i}]", radius_range[i], above=0.0) for i in (0, 1))
    if lo > hi:
        raise ValueError(f"radius_range must not descend; got {radius_range!r}")
    return lo, hi
