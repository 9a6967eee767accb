"""What may change after training: light, orientation, noise, focus, scale, tilt, dropouts.

A condition turns a patch with its surroundings into the patch as another measurement would have
given it. Integers are rounded and limited to the range of their type, as a camera does. Its random
draws follow from a seed, its name and the number of the patch alone, so the same patch changes in
the same way whichever descriptor looks at it, in whatever order.

The strengths are ours: common practice for industrial images, meant to hurt but not to destroy.
"""

import math
import zlib
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from scipy import ndimage

from mfeat import _checks
from mfeat.smoothing import fill_nearest

#: Kinds of image: grey values of a camera, or heights in a length unit.
KINDS = ("grey", "height")

GAMMA = (0.7, 1.4)
GAIN = (0.6, 1.0)
OFFSET = 10.0 / 255.0  # of the full scale, either way
ZOOM = (0.85, 1.15)
NOISE = 0.25  # of the patch's standard deviation
BLUR = 0.8  # pixels
TILT = (1.0, 4.0)  # rise over the patch's side, in standard deviations of the patch
DROPOUTS = 0.05  # share of the pixels
_CLUSTER = 1.5  # scale in pixels of the clusters in which they drop out

_SPLINE = 3  # cubic: a part that lies turned under the camera is not blurred by that


class Scene(NamedTuple):
    """A patch with its surroundings.

    Attributes
    ----------
    region : ndarray or MaskedArray of shape (h + 2 m, w + 2 m)
        Pixels of the patch and of a margin around it.
    margin : int
        Width m of the margin.
    full_scale : float
        Largest grey value; 1 for heights.
    """

    region: np.ndarray
    margin: int
    full_scale: float

    @property
    def patch(self) -> np.ndarray:
        """The patch itself, a view."""
        inner = slice(self.margin, -self.margin or None)
        return self.region[inner, inner]


@dataclass(frozen=True)
class Condition:
    """One condition.

    Attributes
    ----------
    name : str
    kinds : tuple of {"grey", "height"}
        Images for which it makes sense.
    about : str
        What it does, for reports.
    change : callable
        (scene, generator) to the patch.
    """

    name: str
    kinds: tuple[str, ...]
    about: str
    change: Callable[[Scene, np.random.Generator], np.ndarray]


def margin_for(size: tuple[int, int]) -> int:
    """Return the margin that a patch needs around it to be turned by any angle and blurred."""
    diagonal = math.hypot(*size)
    return math.ceil((diagonal - min(size)) / 2) + math.ceil(4 * BLUR)


def generator_for(seed: int, condition: str, patch: int) -> np.random.Generator:
    """Return the source of a patch's random draws under a condition."""
    return np.random.default_rng([seed, zlib.crc32(condition.encode()), patch])


def _clean(scene: Scene, _: np.random.Generator) -> np.ndarray:
    return scene.patch


def _light(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    gamma = math.exp(rng.uniform(*np.log(GAMMA)))
    gain, offset = rng.uniform(*GAIN), rng.uniform(-OFFSET, OFFSET)
    values, missing = _filled(scene.patch)
    share = np.clip(values / scene.full_scale, 0.0, 1.0)
    lit = np.clip(gain * share**gamma + offset, 0.0, 1.0)
    return _as_before(scene, scene.full_scale * lit, missing)


def _rotation(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    angle = rng.uniform(0.0, 2.0 * math.pi)
    cos, sin = math.cos(angle), math.sin(angle)
    return _resampled(scene, np.array([[cos, -sin], [sin, cos]]))


def _zoom(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    return _resampled(scene, np.eye(2) / math.exp(rng.uniform(*np.log(ZOOM))))


def _noise(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    values, missing = _filled(scene.patch)
    sigma = NOISE * _deviation(scene.patch)
    return _as_before(scene, values + sigma * rng.standard_normal(values.shape), missing)


def _blur(scene: Scene, _: np.random.Generator) -> np.ndarray:
    values, missing = _filled(scene.region)
    blurred = ndimage.gaussian_filter(values, BLUR, mode="mirror")
    return _as_before(scene, *_inner(scene, blurred, missing))


def _tilt(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    values, missing = _filled(scene.patch)
    direction = rng.uniform(0.0, 2.0 * math.pi)
    rise = rng.uniform(*TILT) * _deviation(scene.patch) / max(values.shape)
    rows, cols = (np.arange(side) - (side - 1) / 2 for side in values.shape)
    plane = np.add.outer(rise * math.sin(direction) * rows, rise * math.cos(direction) * cols)
    return _as_before(scene, values + plane, missing)


def _dropouts(scene: Scene, rng: np.random.Generator) -> np.ndarray:
    values, missing = _filled(scene.patch)
    noise = ndimage.gaussian_filter(rng.standard_normal(values.shape), _CLUSTER, mode="wrap")
    lost = noise > np.quantile(noise, 1.0 - DROPOUTS)
    return _as_before(scene, values, lost if missing is None else missing | lost)


_KNOWN = (
    Condition("clean", KINDS, "as measured", _clean),
    Condition(
        "light", ("grey",), f"gamma {GAMMA[0]}-{GAMMA[1]}, gain {GAIN[0]}-{GAIN[1]:g}, offset "
        f"±{OFFSET * 255:g} of 255, limited to the range of the type", _light,
    ),
    Condition("rotation", KINDS, "turned by any angle (cubic spline)", _rotation),
    Condition("noise", KINDS, f"white noise of {NOISE:g} of the patch's deviation", _noise),
    Condition("blur", KINDS, f"Gaussian blur of {BLUR:g} pixels", _blur),
    Condition("zoom", KINDS, f"scale {ZOOM[0]}-{ZOOM[1]} (cubic spline)", _zoom),
    Condition(
        "tilt", ("height",), f"a plane that rises by {TILT[0]:g}-{TILT[1]:g} deviations over the "
        "patch", _tilt,
    ),
    Condition("dropouts", ("height",), f"{DROPOUTS:.0%} of the pixels missing, in clusters",
        _dropouts),
)  # fmt: skip

#: All conditions by name, in the order of reports.
CONDITIONS = {condition.name: condition for condition in _KNOWN}


def conditions_for(kind: str, names: Any = None) -> list[Condition]:
    """Return the conditions of some names; by default all that make sense for a kind of image.

    "clean" comes first, always.

    Examples
    --------
    >>> from mfeat.conditions import conditions_for
    >>> [condition.name for condition in conditions_for("height")]
    ['clean', 'rotation', 'noise', 'blur', 'zoom', 'tilt', 'dropouts']
    """
    if names is None:
        return [condition for condition in CONDITIONS.values() if kind in condition.kinds]
    chosen = {*known_names(names), "clean"}
    found = [condition for condition in CONDITIONS.values() if condition.name in chosen]
    for condition in found:
        if kind not in condition.kinds:
            pixels = "floating-point" if kind == "height" else "integer"
            raise ValueError(
                f"condition {condition.name!r} is for {' and '.join(condition.kinds)} images, "
                f"these are {kind} images ({pixels} pixels)"
            )
    return found


def known_names(names: Any) -> list[str]:
    """Return names of conditions as a list, each checked."""
    if isinstance(names, str) or not isinstance(names, Iterable):
        raise TypeError(f"conditions must be a list of names; got {names!r}")
    return [_checks.choice("conditions", name, tuple(CONDITIONS)) for name in names]


def _filled(pixels: np.ndarray) -> tuple[np.ndarray, np.ndarray | None]:
    """Return pixels as float64 without gaps, and where there were some.

    Gaps take the nearest valid value, for the interpolation beside them only: what was missing,
    or touches what was, is missing in the result.
    """
    missing = missing_in(pixels)
    values = np.asarray(pixels).astype(np.float64)
    if missing is None:
        return values, None
    return fill_nearest(values, ~missing), missing


def missing_in(pixels: np.ndarray) -> np.ndarray | None:
    """Return where pixels are masked or NaN; None where all are valid."""
    missing = np.ma.getmaskarray(pixels)
    if pixels.dtype.kind == "f":
        missing = missing | np.isnan(np.ma.getdata(pixels))
    return missing if missing.any() else None


def _deviation(pixels: np.ndarray) -> float:
    missing = missing_in(pixels)
    values = np.asarray(pixels, dtype=np.float64)
    return float(np.std(values if missing is None else values[~missing]))


def _resampled(scene: Scene, matrix: np.ndarray) -> np.ndarray:
    """Return the patch with each pixel taken from `matrix` times its place about the centre."""
    values, missing = _filled(scene.region)
    shape = scene.patch.shape
    centre = (np.array(scene.region.shape) - 1) / 2
    offset = centre - matrix @ ((np.array(shape) - 1) / 2)
    how = {"offset": offset, "output_shape": shape, "mode": "mirror"}
    turned = ndimage.affine_transform(values, matrix, order=_SPLINE, **how)
    if missing is not None:
        reach = ndimage.affine_transform(missing.astype(np.float64), matrix, order=1, **how)
        missing = reach > 1e-9
    return _as_before(scene, turned, missing)


def _inner(scene: Scene, values: np.ndarray, missing: np.ndarray | None) -> tuple:
    inner = slice(scene.margin, -scene.margin or None)
    return values[inner, inner], None if missing is None else missing[inner, inner]


def _as_before(scene: Scene, values: np.ndarray, missing: np.ndarray | None) -> np.ndarray:
    """Return values in the type of the scene, missing in its way: NaN, or masked integers."""
    dtype = scene.region.dtype
    if dtype.kind == "f":
        patch = values.astype(dtype)
        if missing is not None:
            patch[missing] = np.nan
        return patch
    low, high = (0, 1) if dtype.kind == "b" else (np.iinfo(dtype).min, np.iinfo(dtype).max)
    top = float(high)
    if top > high:  # of 64 bits: the float beside it does not fit
        top = np.nextafter(top, 0.0)
    patch = np.clip(np.rint(values), low, top).astype(dtype)
    return patch if missing is None else np.ma.MaskedArray(patch, missing)
