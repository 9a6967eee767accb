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
from mfeat.fields import Field, check_scales, derive
from mfeat.functionals import (
    area_of,
    contour_of,
    direction_steps,
    euler_of,
    per_area,
    per_window,
)
from mfeat.levels import PlacedLevels, Relief, place, sample_of
from mfeat.plan import DIRECTIONS, VectorPlan
from mfeat.stacks import Collected, Group, group_patches, valid_fractions


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


def densities(plan: VectorPlan, table: np.ndarray, windows: np.ndarray) -> np.ndarray:
    """Return the level functionals of the plan, in order, as densities (functionals, ..., T).

    `table` (..., 8, T) holds counts and `windows` (...) the counting windows; NaN where there are
    none.
    """
    found = []
    names = plan.level_functionals()
    if "area" in names:
        found.append(per_window(area_of(table), windows))
    if "contour" in names:
        length = contour_of(table, plan.pitch, plan.contour_estimator)
        found.append(per_area(length, windows, plan.pitch))
    if "euler" in names:
        found.append(per_area(euler_of(table, plan.connectivity), windows, plan.pitch))
    if plan.directional:
        twice = crossings_of(table)
        step = direction_steps(plan.pitch)
        found.extend(per_window(twice[name] / (2 * step[name]), windows) for name in DIRECTIONS)
    return np.array(found).reshape(len(names), *table.shape[:-2], table.shape[-1])


def vectors(plan: VectorPlan, values: np.ndarray, valid: np.ndarray | None) -> np.ndarray:
    """Return the feature vectors (n, features) of a stack of images, float64, as the plan says.

    An image in one of whose fields no window counts gets NaN for that field.
    """
    out = np.empty((len(values), plan.length))
    waiting: dict[int, list] = {}  # by number of levels: functionals of many fields in one go
    functionals = len(plan.level_functionals())
    column = 0
    for field, relief in derive(plan.fields, values, valid, plan.pitch, plan.scale_unit):
        levels = place(relief, plan.level_rule, levels_of(plan, field))
        table, windows = count_stack(relief, levels, valid is not None)
        nothing = windows == 0
        for moment in plan.moments(field):
            number = relief.offset + relief.mean if moment == "mean" else relief.deviation
            out[:, column] = np.where(nothing, np.nan, number) if nothing.any() else number
            column += 1
        count = levels.thresholds.shape[1]
        waiting.setdefault(count, []).append((column, table, windows))
        column += count * functionals
    for count, group in waiting.items():
        columns, tables, windows = zip(*group, strict=True)
        found = densities(plan, levels_from_top(np.stack(tables)), np.stack(windows))
        # (functional, field, image, level) to the columns of (field, functional, level)
        places = np.add.outer(columns, np.arange(functionals * count))
        out[:, places.ravel()] = found.transpose(2, 1, 0, 3).reshape(len(out), -1)
    return out


def rows_of(plan: VectorPlan, group: Group, min_valid: float) -> tuple[np.ndarray, list[str]]:
    """Return the rows of a group of images, and for each a reason to refuse it, or ''.

    Raises
    ------
    ValueError
        If a number does not fit the output type: values so large mean no-data markers.
    """
    rows = np.empty((len(group.images), plan.length))
    reasons = [""] * len(rows)
    for stack in group.stacks():
        with np.errstate(over="ignore", invalid="ignore"):  # checked below
            found = vectors(plan, stack.values, stack.valid)
        rows[stack.places] = found
        if stack.valid is not None:
            fractions = valid_fractions(stack.valid)
            undefined = np.isnan(found).any(axis=1)
            for place, fraction, bad in zip(stack.places, fractions, undefined, strict=True):
                if fraction == 0.0:
                    reasons[place] = "no window of four valid pixels"
                elif fraction < min_valid:
                    reasons[place] = f"valid fraction {fraction:.3g} < min_valid {min_valid:g}"
                elif bad:
                    reasons[place] = "one of its fields has no window of four valid pixels"
    _refuse_overflow(plan, group, rows, reasons)
    return rows, reasons


def _refuse_overflow(plan: VectorPlan, group: Group, rows: np.ndarray, reasons: list[str]) -> None:
    fits = np.abs(rows) <= np.finfo(plan.dtype).max
    if fits.all():
        return
    for k in np.flatnonzero(~fits.all(axis=1)):
        if not reasons[k]:
            image = group.images[k]
            name = plan.features()[int(np.argmin(fits[k]))].name
            raise ValueError(
                f"{group.name(k)}: feature {name} does not fit {plan.dtype}; the pixels reach "
                f"from {np.nanmin(image):.3g} to {np.nanmax(image):.3g}. Set no-data values to NaN "
                "or mask them"
            )


def samples_of(plan: VectorPlan, group: Group, size: int) -> dict[str, list[np.ndarray]]:
    """Return samples of each field of the images of a group, from which levels are learned."""
    pool: dict[str, list[np.ndarray]] = {field.name: [] for field in plan.fields}
    for stack in group.stacks():
        derived = derive(plan.fields, stack.values, stack.valid, plan.pitch, plan.scale_unit)
        for field, relief in derived:
            pool[field.name].extend(sample_of(relief, k, size) for k in range(len(stack.values)))
    return pool


def groups_of(plan: VectorPlan, patches: Collected) -> list[Group]:
    """Return the groups of patches, each large enough for every field of the plan."""
    groups = group_patches(patches)
    for group in groups:
        try:
            check_scales(plan.fields, group.images[0].shape, plan.pitch, plan.scale_unit)
        except ValueError as error:
            raise ValueError(f"{group.name(0)}: {error}") from None
    return groups
