"""From stacks of equal-sized images to rows of numbers: the loop over fields, levels, functionals.

Everything here works on whole stacks without Python code per pixel or per level, and gives each
image the same numbers in whatever stack it comes.
"""

import math
from collections.abc import Iterator
from typing import Any, NamedTuple

import numpy as np

from mfeat import _kernels
from mfeat._checks import read_only
from mfeat.basis import project
from mfeat.counts import (
    STATISTICS,
    index_stack,
    levels_from_top,
)
from mfeat.fields import GAIN, Field, derive, prepared
from mfeat.functionals import (
    anisotropy_of,
    area_of,
    contour_of,
    crossing_densities,
    euler_of,
    per_area,
    per_window,
)
from mfeat.levels import FieldStack, PlacedLevels, place_levels, sample_of
from mfeat.matching import mean_square_slopes, roughness
from mfeat.plan import DIRECTIONS, LENGTH_POWERS, VectorPlan, learned_key
from mfeat.smoothing import Smoothings, moments_of
from mfeat.stacks import Collected, Group, Stack, group_patches, valid_fractions

#: Derived fields of up to this many pixels are joined and worked on together.
JOIN_PIXELS = 1 << 15

#: Stands for the logarithm of the deviation of a field without relief: that of 1e-30.
LOG_OF_NOTHING = float(np.log(1e-30))

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
    if "anisotropy" in names:
        found.append(anisotropy_of(table, windows, plan.pitch))
    if plan.directional:
        directed = crossing_densities(table, windows, plan.pitch)
        found.extend(directed[name] for name in DIRECTIONS)
    return np.array(found).reshape(len(names), *table.shape[:-2], table.shape[-1])


class _Counted(NamedTuple):
    """One field of a stack of n images after counting: what its part of the vectors needs."""

    field: Field
    table: np.ndarray
    windows: np.ndarray
    mean: np.ndarray
    deviation: np.ndarray  # 0 where there is no relief
    length: np.ndarray  # correlation length; 1 where it is not asked for, a pixel without relief


def vectors(plan: VectorPlan, group: Group, stack: Stack) -> np.ndarray:
    """Return the feature vectors (n, features) of a stack of images, float64, as the plan says.

    An image in one of whose fields no window counts gets NaN for that field.
    """
    out = np.empty((len(stack.values), plan.length))
    pixels = pixels_of(plan, stack)
    _write_scale(plan, pixels, out)
    fields = derive(plan.fields, pixels, plan.scale_rule)
    alike: dict[Any, list[_Counted]] = {}
    for part in _joined(plan, group, fields):
        for one in _counted(plan, group, *part):
            column = plan.columns[one.field]
            for moment in plan.moments(one.field):
                number = one.mean if moment == "mean" else one.deviation
                out[:, column] = np.where(one.windows == 0, np.nan, number)
                column += 1
            levels = plan.level_values[one.field.name]
            # Hermite functions depend on where the levels are, not only on how many there are
            key = levels.tobytes() if plan.basis == "hermite" else len(levels)
            alike.setdefault(key, []).append(one)
    for some in alike.values():
        _write_curves(plan, some, out)
    return out


def _write_scale(plan: VectorPlan, pixels: Smoothings, out: np.ndarray) -> None:
    """Write the numbers that tell the scale of each image: logarithms, all at fixed Gaussians.

    The deviation at the first Gaussian is in the pixels' unit; the others, and gradients and
    curvatures, are divided by it. A contrast is the deviation as a share of the pixels' root mean
    square.
    """
    first, before = np.empty(0), None
    for column, (scale, name) in enumerate(plan.scale_features):
        if scale != before:
            sizes = roughness(pixels.at(scale), pixels.valid, pixels.pitch)
            # below its rounding error nothing is told from 0, at any gain
            errors = (GAIN[family] * pixels.error for family in ("smooth", "slope", "curvature"))
            steps = (1.0, min(pixels.pitch), min(pixels.pitch) ** 2)
            deviation, slope, curvature = (
                np.where(size <= error / step, 0.0, size)
                for size, error, step in zip(sizes, errors, steps, strict=True)
            )
            if before is None:
                first = deviation
            own = {"log_std": deviation, "log_slope": slope, "log_curvature": curvature}
            before = scale
        if name == "log_contrast":
            mean = moments_of(pixels.centred(), pixels.valid)[0] + pixels.offset
            number = _log_ratio(
                deviation, np.where(deviation > 0.0, np.hypot(deviation, mean), 1.0)
            )
        elif name == "log_std" and scale == plan.roughness[0]:
            number = _log(deviation)
        else:
            number = _log_ratio(own[name], first)
        out[:, column] = number


def _log(size: np.ndarray) -> np.ndarray:
    """Return logarithms, and `LOG_OF_NOTHING` of 0."""
    some = size > 0.0
    return np.where(some, np.log(np.where(some, size, 1.0)), LOG_OF_NOTHING)


def _log_ratio(size: np.ndarray, reference: np.ndarray) -> np.ndarray:
    """Return log(size / reference), which no gain changes, also where one of them is 0."""
    some, beside = size > 0.0, reference > 0.0
    one_sided = np.where(some, -LOG_OF_NOTHING, LOG_OF_NOTHING)
    return np.where(some == beside, _log(size) - _log(reference), one_sided)


def _counted(
    plan: VectorPlan, group: Group, names: list[Field], fields: FieldStack
) -> Iterator[_Counted]:
    """Place levels on fields, count, and yield the fields one by one."""
    count = len(fields.values) // len(names)
    own_levels = [plan.levels_of(field, group.channel_name) for field in names]
    values = own_levels[0]
    if any(other is not values for other in own_levels):
        values = np.repeat(np.stack(own_levels), count, axis=0)
    levels = place_levels(fields, plan.level_rule, values)
    table, windows = count_stack(fields, levels, not fields.valid.all())
    lengths = np.ones(len(windows))
    if plan.separate_scale:
        tau = mean_square_slopes(fields.centred, fields.valid, plan.pitch)
        tau[np.sqrt(tau) <= fields.rounding / min(plan.pitch)] = 0.0  # a checkerboard has none
        lengths = _correlation_lengths(fields.deviation, tau, math.sqrt(math.prod(plan.pitch)))
    for k, field in enumerate(names):
        own = slice(k * count, (k + 1) * count)
        mean = (fields.offset + fields.mean)[own]
        yield _Counted(field, table[own], windows[own], mean, fields.deviation[own], lengths[own])


def _correlation_lengths(deviation: np.ndarray, tau: np.ndarray, pixel: float) -> np.ndarray:
    """Return s / sqrt(tau), by which Gaussian theory scales curves; a pixel where one of them is 0.

    Sources: Rice (1944/45), Adler (1981), Tomita (1986): contour sqrt(tau)/(2 s) exp(-v^2/2), Euler
    number tau v/((2 pi)^1.5 s^2) exp(-v^2/2) at the level v in standard deviations.
    """
    defined = (deviation > 0.0) & (tau > 0.0)
    return np.where(defined, deviation, pixel) / np.sqrt(np.where(defined, tau, 1.0))


def _write_curves(plan: VectorPlan, done: list[_Counted], out: np.ndarray) -> None:
    """Write the curves of fields with equal numbers of levels; for "hermite", equal levels."""
    windows = np.stack([one.windows for one in done])
    table = levels_from_top(np.stack([one.table for one in done]))
    found = densities(plan, table, windows)  # (functional, field, image, level)
    if plan.separate_scale:
        length = np.stack([one.length for one in done])[:, :, None]
        for k, functional in enumerate(plan.level_functionals()):
            found[k] *= length ** LENGTH_POWERS.get(functional, 1)
    starts = [plan.columns[one.field] + len(plan.moments(one.field)) for one in done]
    column = 0
    for functional, curves in zip(plan.level_functionals(), found, strict=True):
        if plan.basis == "hermite":
            levels = plan.level_values[done[0].field.name]
            curves = project(functional, curves, levels, plan.terms[functional])
        width = curves.shape[-1]
        places = np.add.outer(starts, column + np.arange(width))
        out[:, places.ravel()] = curves.transpose(1, 0, 2).reshape(len(out), -1)
        column += width


def _joined(
    plan: VectorPlan, group: Group, fields: Iterator[tuple[Field, FieldStack]]
) -> Iterator[tuple[list[Field], FieldStack]]:
    """Yield the fields of a stack; few pixels of equal size and number of levels as one stack.

    It makes no difference to any value. For one patch, calls cost more than pixels, and this saves
    two calls of three.
    """
    alike: dict[tuple, list[tuple[Field, FieldStack]]] = {}
    for field, found in fields:
        if found.derived and found.values.size <= JOIN_PIXELS:
            number = len(plan.levels_of(field, group.channel_name))
            alike.setdefault((found.values.shape, number), []).append((field, found))
        else:
            yield [field], found
    for parts in alike.values():
        yield [field for field, _ in parts], FieldStack.join([found for _, found in parts])


def pixels_of(plan: VectorPlan, stack: Stack) -> Smoothings:
    """Return a stack of images, ready to have the fields of a plan derived."""
    return prepared(stack.values, stack.valid, plan.pitch, plan.scale_unit, plan.remove_tilt)


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
        for field, fields in derive(plan.fields, pixels_of(plan, stack), plan.scale_rule):
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
            plan.check_scales(group.images[0].shape)
        except ValueError as error:
            raise ValueError(f"{group.name(0)}: {error}") from None
    return groups
