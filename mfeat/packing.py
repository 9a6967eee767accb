"""Scenes as a few large arrays, which worker processes share through mapped memory, and back."""

from collections import defaultdict
from typing import Any

import numpy as np

from mfeat.conditions import Scene


def packed(scenes: list[Scene]) -> dict[str, np.ndarray]:
    """Return scenes as a few plain arrays, one a type of pixel, with shapes and gaps.

    Workers share large arrays through mapped memory, many small ones would travel to each.
    """
    arrays: dict[str, Any] = {}
    by_type: dict[str, list[int]] = defaultdict(list)
    for k, scene in enumerate(scenes):
        by_type[str(scene.region.dtype)].append(k)
    for name, members in by_type.items():
        regions = [scenes[k].region for k in members]
        arrays[f"{name}:pixels"] = np.concatenate([np.ma.getdata(r).ravel() for r in regions])
        arrays[f"{name}:gaps"] = np.packbits(
            np.concatenate([np.ma.getmaskarray(r).ravel() for r in regions])
        )
        arrays[f"{name}:members"] = np.array(members)
    arrays["shapes"] = np.array([scene.region.shape for scene in scenes])
    arrays["margins"] = np.array([scene.margin for scene in scenes])
    arrays["scales"] = np.array([scene.full_scale for scene in scenes])
    return arrays


def unpacked(arrays: Any) -> list[Scene]:
    """Return the scenes that `packed` packed."""
    shapes, margins, scales = (arrays[name] for name in ("shapes", "margins", "scales"))
    scenes: list[Any] = [None] * len(shapes)
    for key in [name for name in arrays if name.endswith(":pixels")]:
        name = key.removesuffix(":pixels")
        pixels, members = arrays[key], arrays[f"{name}:members"]
        gaps = np.unpackbits(arrays[f"{name}:gaps"], count=len(pixels)).astype(bool)
        start = 0
        for k in members.tolist():
            shape = tuple(shapes[k].tolist())
            stop = start + shape[0] * shape[1]
            region, missing = (a[start:stop].reshape(shape) for a in (pixels, gaps))
            if missing.any():
                region = np.ma.MaskedArray(region, missing)
            scenes[k] = Scene(region, int(margins[k]), float(scales[k]))
            start = stop
    return scenes
