"""Descriptors from small neighbourhoods: oriented gradients, random kernels."""

from numbers import Integral
from typing import ClassVar

import numpy as np
from scipy import ndimage
from skimage.feature import hog
from sklearn.utils._param_validation import Interval, StrOptions

from mfeat import _checks
from mfeat._descriptor_base import (
    TextureDescriptor,
    one_by_one,
    positive_integers,
    standardised,
)
from mfeat._filters import orientation_names, over_orientations


class OrientedGradients(TextureDescriptor):
    """Histograms of oriented gradients, pooled over the patch or kept cell by cell.

    The histograms are those of Dalal and Triggs (2005) as `skimage.feature.hog` takes them: cells,
    blocks of 2x2 cells normalised by "L2-Hys". They were made for shapes, where places matter; in a
    texture places do not, so by default mean and standard deviation over all blocks are taken, at
    several smoothings. Patches are standardised.

    Parameters
    ----------
    orientations : int, default 9
        Number of orientation bins over 180 degrees, 2 to 64.
    cells : int, optional
        Number of cells along each side of the patch, 2 to 64, whose blocks are all kept; default
        None pools blocks of square cells of `cell_side` pixels. Rows and columns beyond a multiple
        of the cell are left out at the bottom and right.
    cell_side : int, default 8
        Side of the pooled cells in pixels, 2 to 64.
    scales : tuple of float, default (0, 1, 2)
        Standard deviations in pixels of the Gaussians that smooth the patch first, ascending; 0
        for none.
    rotation : {"harmonics", "kept"}, default "harmonics"
        Whether moduli of the Fourier coefficients over the orientations are features, which turning
        the patch hardly changes if blocks are pooled, or each orientation by itself.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import OrientedGradients
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> OrientedGradients().fit_transform(patches).shape
    (5, 32)
    >>> OrientedGradients(cells=4, scales=(0,), rotation="kept").fit_transform(patches).shape
    (5, 326)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "orientations": [Interval(Integral, 2, 64, closed="both")],
        "cells": [Interval(Integral, 2, 64, closed="both"), None],
        "cell_side": [Interval(Integral, 2, 64, closed="both")],
        "scales": [tuple, list],
        "rotation": [StrOptions({"harmonics", "kept"})],
    }

    def __init__(
        self,
        orientations=9,
        cells=None,
        cell_side=8,
        scales=(0, 1, 2),
        rotation="harmonics",
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.orientations = orientations
        self.cells = cells
        self.cell_side = cell_side
        self.scales = scales
        self.rotation = rotation
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        for k, scale in enumerate(self.scales):
            _checks.real(f"scales[{k}]", scale, minimum=0.0)
        if not len(self.scales) or sorted(set(self.scales)) != list(self.scales):
            raise ValueError(
                f"scales must ascend strictly and hold at least one number; got {self.scales!r}"
            )

    def _smallest_side(self) -> int:
        return 2 * (self.cell_side if self.cells is None else self.cells)

    def _names(self) -> list[str]:
        if self.cells is None:
            blocks = ["mean", "std"]
        else:
            inner = range(self.cells - 1)
            blocks = [f"block_{r:02d}_{c:02d}_{k}" for r in inner for c in inner for k in range(4)]
        return [
            f"gradients_{scale:02d}_{block}_{orientation}"
            for scale in range(len(self.scales))
            for block in blocks
            for orientation in orientation_names(self.orientations, self.rotation)
        ]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        rows = []
        for patch in standardised(pixels):
            found = [self._blocks(ndimage.gaussian_filter(patch, scale)) for scale in self.scales]
            rows.append(np.concatenate(found))
        return np.array(rows)

    def _blocks(self, patch: np.ndarray) -> np.ndarray:
        """Return the features of all blocks of a patch, pooled if that is wanted."""
        if self.cells is None:
            cell = (self.cell_side, self.cell_side)
        else:
            cell = tuple(side // self.cells for side in patch.shape)
            patch = patch[: cell[0] * self.cells, : cell[1] * self.cells]
        found = hog(
            patch,
            orientations=self.orientations,
            pixels_per_cell=cell,
            cells_per_block=(2, 2),
            block_norm="L2-Hys",
            feature_vector=False,
        )
        found = over_orientations(found, self.rotation)
        if self.cells is not None:
            return found.ravel()
        found = found.reshape(-1, found.shape[-1])
        return np.concatenate([found.mean(axis=0), found.std(axis=0)])


class RandomKernels(TextureDescriptor):
    """Random convolution kernels, each summarised by its share of positive responses and maximum.

    The idea of Dempster, Petitjean and Webb (2020), from time series to images: many small random
    kernels at several dilations, of normal weights with mean 0 and uniform biases in (-1, 1), and
    two numbers of each response. Patches are standardised; kernels stay inside them.

    Parameters
    ----------
    kernels : int, default 240
        Number of kernels, 1 to 20,000; the dilations take turns.
    side : int, default 5
        Side of the square kernels in pixels, 2 to 15.
    dilations : tuple of int, default (1, 2, 4)
        Distances between neighbouring weights in pixels, ascending.
    turned : bool, default True
        Whether each kernel is applied in its four quarter turns and the numbers averaged, against
        rotation; takes four times as long.
    seed : int, default 0
        Seed of the kernels, from 0.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import RandomKernels
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> RandomKernels().fit_transform(patches).shape
    (5, 482)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "kernels": [Interval(Integral, 1, 20_000, closed="both")],
        "side": [Interval(Integral, 2, 15, closed="both")],
        "dilations": [tuple, list],
        "turned": ["boolean"],
        "seed": [Interval(Integral, 0, None, closed="left")],
    }

    def __init__(
        self,
        kernels=240,
        side=5,
        dilations=(1, 2, 4),
        turned=True,
        seed=0,
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.kernels = kernels
        self.side = side
        self.dilations = dilations
        self.turned = turned
        self.seed = seed
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        positive_integers("dilations", self.dilations)

    def _smallest_side(self) -> int:
        return (self.side - 1) * self.dilations[-1] + 1

    def _names(self) -> list[str]:
        digits = len(str(self.kernels - 1))
        return [
            f"kernel_{k:0{digits}d}_{number}"
            for k in range(self.kernels)
            for number in ("positive", "max")
        ]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        weights, biases = random_kernels(self.seed, self.kernels, self.side)
        turns = range(4 if self.turned else 1)
        forms = [np.rot90(weights, turn, axes=(1, 2)).reshape(len(weights), -1) for turn in turns]
        out = np.zeros((len(pixels), self.kernels, 2))
        for place, patch in enumerate(one_by_one(pixels)):
            for first, dilation in enumerate(self.dilations):
                own = slice(first, None, len(self.dilations))
                windows = dilated_windows(patch, self.side, dilation)
                for form in forms:
                    responses = form[own] @ windows
                    positive = responses > -biases[own, None]
                    out[place, own, 0] += positive.mean(axis=1)
                    out[place, own, 1] += responses.max(axis=1) + biases[own]
        return out.reshape(len(pixels), -1) / len(forms)


def random_kernels(seed: int, number: int, side: int) -> tuple[np.ndarray, np.ndarray]:
    """Return float32 weights (number, side, side) with mean 0, and biases (number,)."""
    rng = np.random.Generator(np.random.PCG64(seed))
    weights = rng.normal(size=(number, side, side))
    weights -= weights.mean(axis=(1, 2), keepdims=True)
    return weights.astype(np.float32), rng.uniform(-1, 1, size=number).astype(np.float32)


def dilated_windows(patch: np.ndarray, side: int, dilation: int) -> np.ndarray:
    """Return the pixels under each weight (side², positions) at all positions inside a patch."""
    rows, cols = (length - (side - 1) * dilation for length in patch.shape)
    shifts = range(0, side * dilation, dilation)
    return np.stack([patch[r : r + rows, c : c + cols].ravel() for r in shifts for c in shifts])
