"""From stacks of equal-sized images to rows of numbers: the loop over fields, levels, functionals.

Everything here works on whole stacks without Python code per pixel or per level, and gives each
image the same numbers in whatever stack it comes.
"""

from collections.abc import Iterator

import numpy as np

from mfeat import _kernels
from mfeat._checks import read_only
from mfeat.counts import (
    STATISTICS,
    index_stack,
    levels_from_top,
)
from mfeat.fields import Field, check_scales, derive
from mfeat.functionals import (
    area_of,
    contour_of,
    crossing_densities,
    euler_of,
    per_area,
    per_window,
)
from mfeat.levels import FieldStack, PlacedLevels, place_levels, sample_of
from mfeat.plan import DIRECTIONS, VectorPlan, learned_key
from mfeat.stacks import Collected, Group, Stack, group_patches, valid_fractions

#: Derived fields of up to this many pixels are joined and worked on together.
JOIN_PIXELS = 1 << 15

NO_WINDOW = "one of its fields has no window of four valid pixels"


def count_stack(
    fields: FieldStack, levels: PlacedLevels, missing: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Index and count a stack of fields inside windows.

    Returns histograms over level indices (n, 8, T + 1) and the counting windows of each field (n,).
    """
    count, rows, cols = fields.values.shape
    index = index_stack(fields.values, levels.thresholds, levels.reach)
    table = np.zeros((count, len(STATISTICS), levels.thresholds.shape[1] + 1), dtype=np.int64)
    if not missing:
        _kernels.count_complete_stack(index, table)
        return table, np.full(count, (rows - 1) * (cols - 1))
    ok = np.empty((count, rows + 1, cols + 1), dtype=np.uint8)
    windows = np.array([_kernels.windows_ok(fields.valid[k], ok[k]) for k in range(count)])
    _kernels.count_stack(index, read_only(ok), table)
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
        directed = crossing_densities(table, windows, plan.pitch)
        found.extend(directed[name] for name in DIRECTIONS)
    return np.array(found).reshape(len(names), *table.shape[:-2], table.shape[-1])


def vectors(plan: VectorPlan, group: Group, stack: Stack) -> np.ndarray:
    """Return the feature vectors (n, features) of a stack of images, float64, as the plan says.

    An image in one of whose fields no window counts gets NaN for that field.
    """
    count = len(stack.values)
    out = np.empty((count, plan.length))
    waiting: dict[int, list] = {}  # by number of levels: functionals of many fields in one go
    for names, fields in _joined(plan, group, stack):
        own_levels = [plan.levels_of(field, group.channel_name) for field in names]
        values = own_levels[0]
        if any(other is not values for other in own_levels):
            values = np.repeat(np.stack(own_levels), count, axis=0)
        levels = place_levels(fields, plan.level_rule, values)
        table, windows = count_stack(fields, levels, stack.valid is not None)
        for k, field in enumerate(names):
            own = slice(k * count, (k + 1) * count)
            column = plan.columns[field]
            for moment in plan.moments(field):
                number = fields.deviation if moment == "std" else fields.offset + fields.mean
                out[:, column] = number[own]
                if stack.valid is not None:
                    out[windows[own] == 0, column] = np.nan
                column += 1
            part = (column, table[own], windows[own])
            waiting.setdefault(values.shape[-1], []).append(part)
    for number, parts in waiting.items():
        columns, tables, windows = zip(*parts, strict=True)
        found = densities(plan, levels_from_top(np.stack(tables)), np.stack(windows))
        # (functional, field, image, level) to the columns of (field, functional, level)
        places = np.add.outer(columns, np.arange(len(found) * number))
        out[:, places.ravel()] = found.transpose(2, 1, 0, 3).reshape(count, -1)
    return out


def _joined(
    plan: VectorPlan, group: Group, stack: Stack
) -> Iterator[tuple[list[Field], FieldStack]]:
    """Yield the fields of a stack; few pixels of equal size and number of levels as one stack.

    It makes no difference to any value. For one patch, calls cost more than pixels, and this saves
    two calls of three.
    """
    alike: dict[tuple, list[tuple[Field, FieldStack]]] = {}
    for field, fields in fields_of(plan, stack):
        if fields.derived and fields.values.size <= JOIN_PIXELS:
            number = len(plan.levels_of(field, group.channel_name))
            alike.setdefault((fields.values.shape, number), []).append((field, fields))
        else:
            yield [field], fields
    for parts in alike.values():
        yield [field for field, _ in parts], FieldStack.join([fields for _, fields in parts])


def fields_of(plan: VectorPlan, stack: Stack) -> Iterator[tuple[Field, FieldStack]]:
    """Yield the fields of a stack, in the order of the plan."""
    return derive(
        plan.fields, stack.values, stack.valid, plan.pitch, plan.scale_unit, plan.remove_tilt
    )


def refusals(stack: Stack, min_valid: float) -> dict[int, str]:
    """Return for each image with too few valid pixels its place in the group and the reason."""
    if stack.valid is None:
        return {}
    fractions = zip(stack.places, valid_fractions(stack.valid), strict=True)
    reasons = {int(place): refusal(fraction, min_valid) for place, fraction in fractions}
    return {place: reason for place, reason in reasons.items() if reason is not None}


def refusal(valid_fraction: float, min_valid: float) -> str | None:
    """Return why an image of a valid fraction is refused, or None if it is not."""
    if valid_fraction == 0.0:
        return "no window of four valid pixels"
    if valid_fraction < min_valid:
        return f"valid fraction {valid_fraction:.3g} < min_valid {min_valid:g}"
    return None


def rows_of(plan: VectorPlan, group: Group, min_valid: float) -> tuple[np.ndarray, dict[int, str]]:
    """Return the rows of a group of images, and by place the reason to refuse one.

    Raises
    ------
    ValueError
        If a number does not fit the output type.
    """
    rows = np.empty((len(group.images), plan.length), dtype=plan.dtype)
    refused: dict[int, str] = {}
    for stack in group.stacks():
        found = vectors(plan, group, stack)
        refused |= refusals(stack, min_valid)
        for place in stack.places[np.isnan(found).any(axis=1)].tolist():
            refused.setdefault(place, NO_WINDOW)
        if refused:
            found[np.isin(stack.places, list(refused))] = np.nan
        size = np.abs(found)
        limits = np.finfo(plan.dtype)
        fits = (size <= limits.max) & ((size >= limits.tiny) | (size == 0.0)) | np.isnan(size)
        if not fits.all():
            k, column = np.argwhere(~fits)[0]
            raise ValueError(
                f"{group.name(int(stack.places[k]))}: feature {plan.features()[column].name} is "
                f"{found[k, column]:.3g}, which {plan.dtype} cannot hold. Set no-data values to "
                'NaN, use another unit of the pixels or the pitch, or dtype="float64"'
            )
        rows[stack.places] = found
    return rows, refused


def samples_of(
    plan: VectorPlan, group: Group, options: tuple[int, float]
) -> tuple[dict[str, dict[int, np.ndarray]], dict[int, str]]:
    """Return samples of each field of the images of a group, from which levels are learned.

    `options` are the size of a sample and `min_valid`. Samples are by key of the learned levels and
    place in the group. Images that `rows_of` would refuse are not sampled; they are returned by
    place, with the reason.
    """
    size, min_valid = options
    pool: dict[str, dict[int, np.ndarray]] = {
        learned_key(field, group.channel_name): {} for field in plan.fields
    }
    refused: dict[int, str] = {}
    for stack in group.stacks():
        refused |= refusals(stack, min_valid)
        for field, fields in fields_of(plan, stack):
            if stack.valid is not None:
                for place in stack.places[valid_fractions(fields.valid) == 0.0].tolist():
                    refused.setdefault(place, NO_WINDOW)
            samples = pool[learned_key(field, group.channel_name)]
            for k, place in enumerate(stack.places.tolist()):
                if place not in refused:
                    samples[place] = sample_of(fields, k, size)
    return pool, refused


def groups_of(plan: VectorPlan, patches: Collected) -> list[Group]:
    """Return the groups of patches, each large enough for every field of the plan."""
    groups = group_patches(patches, plan.table_size)
    for group in groups:
        try:
            check_scales(plan.fields, group.images[0].shape, plan.pitch, plan.scale_unit)
        except ValueError as error:
            raise ValueError(f"{group.name(0)}: {error}") from None
    return groups
