"""From stacks of equal-sized images to rows of numbers: the loop over fields, levels, functionals.

Everything here works on whole stacks without Python code per pixel or per level, and gives each
image the same numbers in whatever stack it comes.
"""

import numpy as np

from mfeat import _kernels
from mfeat.counts import (
    STATISTICS,
    all_windows_ok,
    crossings_of,
    index_stack,
    levels_from_top,
)
from mfeat.fields import Field, derive
from mfeat.functionals import area_of, contour_of, direction_steps, euler_of
from mfeat.levels import PlacedLevels, Relief, place, sample_of
from mfeat.plan import DIRECTIONS, VectorPlan


def levels_of(plan: VectorPlan, field: Field) -> np.ndarray:
    """Return the levels to place on a field: learned ones where the plan has them."""
    return (plan.learned or plan.level_values)[field.name]


def count_stack(
    relief: Relief, levels: PlacedLevels, missing: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Index and count a stack of fields inside windows.

    Returns histograms over level indices (n, 8, T + 1) and the counting windows of each field (n,).
    """
    count, rows, cols = relief.values.shape
    index = index_stack(relief.values, levels.thresholds, levels.reach)
    if missing:
        ok = np.empty((count, rows + 1, cols + 1), dtype=np.uint8)
        windows = np.array([_kernels.windows_ok(relief.valid[k], ok[k]) for k in range(count)])
    else:
        whole, number = all_windows_ok(rows, cols)
        ok, windows = whole[None], np.full(count, number)
    table = np.zeros((count, len(STATISTICS), levels.thresholds.shape[1] + 1), dtype=np.int64)
    _kernels.count_stack(index, ok, table)
    return table, windows


def densities(plan: VectorPlan, table: np.ndarray, windows: np.ndarray) -> list[np.ndarray]:
    """Return the level functionals of the plan, in order, as densities (..., T).

    `table` (..., 8, T) holds counts and `windows` (...) the counting windows; NaN where there are
    none.
    """
    dy, dx = plan.pitch
    found = []
    with np.errstate(divide="ignore", invalid="ignore"):
        per_window = 1.0 * windows[..., None]
        per_area = per_window * (dy * dx)
        names = plan.level_functionals()
        if "area" in names:
            found.append(area_of(table) / per_window)
        if "contour" in names:
            found.append(contour_of(table, plan.pitch, plan.contour_estimator) / per_area)
        if "euler" in names:
            found.append(euler_of(table, plan.connectivity) / per_area)
        if plan.directional:
            twice = crossings_of(table)
            step = direction_steps(plan.pitch)
            found.extend(twice[name] / (2 * per_window * step[name]) for name in DIRECTIONS)
    return found


def vectors(plan: VectorPlan, values: np.ndarray, valid: np.ndarray | None) -> np.ndarray:
    """Return the feature vectors (n, features) of a stack of images, float64, as the plan says.

    An image in one of whose fields no window counts gets NaN for that field.
    """
    out = np.empty((len(values), plan.length()))
    waiting: dict[int, list] = {}  # by number of levels: functionals of many fields in one go
    column = 0
    for field, relief in derive(plan.fields, values, valid, plan.pitch, plan.scale_unit):
        levels = place(relief, plan.level_rule, levels_of(plan, field))
        table, windows = count_stack(relief, levels, valid is not None)
        for moment in plan.moments(field):
            number = relief.offset + relief.mean if moment == "mean" else relief.deviation
            out[:, column] = np.where(windows == 0, np.nan, number)
            column += 1
        count = levels.thresholds.shape[1]
        waiting.setdefault(count, []).append((column, table, windows))
        column += count * len(plan.level_functionals())
    for count, group in waiting.items():
        columns, tables, windows = zip(*group, strict=True)
        found = densities(plan, levels_from_top(np.stack(tables)), np.stack(windows))
        for k, functional in enumerate(found):
            for column, density in zip(columns, functional, strict=True):
                out[:, column + k * count : column + (k + 1) * count] = density
    return out


def samples(
    plan: VectorPlan, values: np.ndarray, valid: np.ndarray | None, size: int
) -> dict[str, list[np.ndarray]]:
    """Return the samples of each field of each image of a stack, from which levels are learned."""
    return {
        field.name: [sample_of(relief, k, size) for k in range(len(values))]
        for field, relief in derive(plan.fields, values, valid, plan.pitch, plan.scale_unit)
    }
