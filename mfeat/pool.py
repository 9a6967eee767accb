"""The patches of a comparison: chosen places, read with the surroundings that conditions need."""

from collections import Counter, defaultdict
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from tqdm import tqdm

from mfeat._checks import number
from mfeat._pages import Page, UnreadableImage
from mfeat.conditions import Scene, margin_for, missing_in
from mfeat.cutting import OpenFiles, cuts
from mfeat.entries import Sources
from mfeat.images import grey_rows, missing_pixels, open_pages
from mfeat.options import DumpSettings
from mfeat.patches import window_shares
from mfeat.planning import Item, make_plan
from mfeat.vector import refusal

#: How many times the patches that a split needs are taken from each half at most.
_SPARE = 2


class Place(NamedTuple):
    """Where a patch lies, and what it is.

    `bounds` (top, left, bottom, right) is where its surroundings may be read; beyond, they are
    mirrored. `half` is 0 or 1 under protocol "halves".
    """

    entry: int
    page: int
    row: int
    col: int
    height: int
    width: int
    bounds: tuple[int, int, int, int]
    label: Any
    group: str
    half: int


@dataclass
class Pool:
    """Chosen patches with their surroundings.

    Attributes
    ----------
    places : list of Place
    scenes : list of Scene
    kind : {"grey", "height"}
    mirrored : int
        Patches part of whose surroundings lie outside and were mirrored.
    left_out : list of (str, str)
        Images and patches that are not used, and why.
    overlapping : bool
        Whether patches of an image overlap, because it is too small for enough separate ones.
    """

    places: list[Place]
    scenes: list[Scene] = field(default_factory=list)
    kind: str = "grey"
    mirrored: int = 0
    left_out: list[tuple[str, str]] = field(default_factory=list)
    overlapping: bool = False

    @property
    def classes(self) -> list[Any]:
        """The labels there are, in order."""
        return sorted({place.label for place in self.places}, key=lambda one: (str(type(one)), one))

    def codes(self) -> np.ndarray:
        """Return the class of each patch as its position in `classes`."""
        position = {label: k for k, label in enumerate(self.classes)}
        return np.array([position[place.label] for place in self.places], dtype=np.int64)


def halves_pool(sources: Sources, settings: DumpSettings, wanted: int, quiet: bool) -> Pool:
    """Choose patches of both halves of every image, which is a class of its own.

    Parameters
    ----------
    sources : Sources
    settings : DumpSettings
    wanted : int
        Patches that each half should give; at most twice as many are taken. Where separate ones
        with their surroundings are fewer, patches overlap by up to half their side.
    quiet : bool
        Whether no progress is shown.

    Raises
    ------
    ValueError
        If an image gives fewer than two patches a half, or there are fewer than two images.
    """
    pool = Pool([])
    small = []
    for item in _readable(sources, settings, pool):
        source = _name_of(sources, item)
        found, overlap = _in_halves(item, settings.grid.size, wanted, source)
        pool.overlapping |= overlap
        pool.places += found
        if len(found) < 4:
            small.append(f"{source} ({item.height}x{item.width})")
    rows, cols = settings.grid.size
    if small:
        raise ValueError(
            f"{number(len(small), 'image')} too small for two patches of {rows}x{cols} pixels in "
            f"each half: {', '.join(small[:5])}; use a smaller size, or leave them out"
        )
    why = "one image is one class, so two images at least are needed"
    _require_classes(pool, why)
    _read_scenes(pool, sources, settings, quiet)
    _leave_out_poor(pool)
    _require_classes(pool, why)
    return pool


def _leave_out_poor(pool: Pool) -> None:
    """Leave out images that have fewer than two usable patches in a half."""
    counts = Counter((place.label, place.half) for place in pool.places)
    poor = [one for one in pool.classes if min(counts[one, 0], counts[one, 1]) < 2]
    pool.left_out += [(one, "fewer than two usable patches in a half") for one in poor]
    kept = [k for k, place in enumerate(pool.places) if place.label not in poor]
    pool.places, pool.scenes = ([all_[k] for k in kept] for all_ in (pool.places, pool.scenes))


def labelled_pool(
    sources: Sources, settings: DumpSettings, wanted: int, seed: int, quiet: bool
) -> Pool:
    """Choose up to `wanted` labelled patches of each class, evenly over their groups.

    Raises
    ------
    ValueError
        If no patch has a label, there are fewer than two classes, or a class has one patch.
    """
    pool = Pool([])
    entries = sources.entries.select(["source", "label", "group"]).to_pylist()
    unlabelled = 0
    min_valid = float(settings.transformer.min_valid)
    for item, cut in _all_cuts(sources, settings, pool, quiet):
        entry = entries[item.entry]
        reasons = [
            cut.damage or cut.infinite(k) or refusal(fraction, min_valid)
            for k, fraction in enumerate(cut.fractions.tolist())
        ]
        good = np.array([reason is None for reason in reasons])
        places = cut.positions + np.array([cut.top, cut.left])
        for k in np.flatnonzero(~good):
            where = f"{entry['source']} row {places[k][0]}, column {places[k][1]}"
            pool.left_out.append((where, reasons[k]))
        if not good.any():
            continue
        kept = cut.chosen(good)
        labels = [entry["label"]] * len(kept)
        if cut.truth is not None:
            labels = kept.label(cut.truth, settings.truth_rule).labels.tolist()
        group = entry["group"] if entry["group"] is not None else entry["source"]
        bounds = (0, 0, item.rows, item.cols)
        for label, (row, col) in zip(labels, places[good].tolist(), strict=True):
            unlabelled += label is None
            if label is not None:
                own = (item.entry, item.page, row, col, *cut.size, bounds, label, group, -1)
                pool.places.append(Place(*own))
    if not pool.places and unlabelled:
        raise ValueError(
            "no patch has a label; name where labels come from (label_from), or compare with "
            'protocol="halves", where every image is a class of its own'
        )
    if unlabelled:
        pool.left_out.append((number(unlabelled, "patch", "patches"), "no label"))
    pool.places = _drawn(pool.places, wanted, seed)
    _require_classes(pool, "two classes at least are needed")
    counts = Counter(place.label for place in pool.places)
    if single := [repr(label) for label, count in counts.items() if count < 2]:
        raise ValueError(
            f"classes {', '.join(single)} have one patch each; label more of them, or leave the "
            "classes out"
        )
    _read_scenes(pool, sources, settings, quiet)
    return pool


def _require_classes(pool: Pool, why: str) -> None:
    if len(pool.classes) < 2:
        first = ""
        if pool.left_out:
            source, reason = pool.left_out[0]
            first = f"; {len(pool.left_out)} left out, e.g. {source}: {reason}"
        raise ValueError(f"{why}; found {number(len(pool.classes), 'class', 'classes')}{first}")


def _readable(sources: Sources, settings: DumpSettings, pool: Pool) -> Iterator[Item]:
    """Yield the items of a plan that can be read; the others are left out, with the reason."""
    plan = make_plan(sources, settings)
    for row in plan.items.select(Item._fields).to_pylist():
        item = Item(**row)
        if item.reason is None:
            yield item
        else:
            pool.left_out.append((_name_of(sources, item), item.reason))


def _name_of(sources: Sources, item: Item) -> str:
    entry = sources.entries.slice(item.entry, 1).select(["source", "row", "col"]).to_pylist()[0]
    region = "" if entry["row"] is None else f" row {entry['row']}, column {entry['col']}"
    page = f" page {item.page}" if item.page else ""
    return f"{entry['source']}{page}{region}"


def _in_halves(
    item: Item, size: tuple[int, int], wanted: int, source: str
) -> tuple[list[Place], bool]:
    """Return places in the upper and lower half of an item, and whether they overlap."""
    half_rows = item.height // 2
    margin = margin_for(size)
    rows, cols, overlap = _starts((half_rows, item.width), size, margin, wanted)
    places = []
    for half in (0, 1):
        top = item.row + half * (item.height - half_rows)
        bounds = (top, item.col, top + half_rows, item.col + item.width)
        grid = [(row, col) for row in rows for col in cols]
        if len(grid) > _SPARE * wanted:  # of a large image, places spread over all of it
            evenly = np.linspace(0, len(grid) - 1, _SPARE * wanted).round().astype(int)
            grid = [grid[k] for k in evenly]
        for row, col in grid:
            own = (item.entry, item.page, top + row, item.col + col, *size, bounds)
            places.append(Place(*own, source, source, half))
    return places, overlap


def _starts(
    area: tuple[int, int], size: tuple[int, int], margin: int, wanted: int
) -> tuple[list[int], list[int], bool]:
    """Return rows and columns at which patches start, evenly spread over an area.

    Separate patches with all their surroundings inside if there are enough, else the surroundings
    may be mirrored, else patches overlap by half.
    """
    best: tuple[list[int], list[int], bool] = ([], [], False)
    for room, share in ((margin, 1.0), (0, 1.0), (margin, 0.5), (0, 0.5)):
        axes = []
        for length, side in zip(area, size, strict=True):
            free = length - side - 2 * room
            count = int(free / (side * share)) + 1 if free >= 0 else 0
            axes.append(np.linspace(room, room + free, count).round().astype(int).tolist()
                        if count > 1 else [room + free // 2] * count)  # fmt: skip
        if len(axes[0]) * len(axes[1]) > len(best[0]) * len(best[1]):
            best = (axes[0], axes[1], share < 1.0)
        if len(best[0]) * len(best[1]) >= wanted:
            break
    return best


def _all_cuts(
    sources: Sources, settings: DumpSettings, pool: Pool, quiet: bool
) -> Iterator[tuple[Item, Any]]:
    needed = sources.entries.to_pylist()
    items = list(_readable(sources, settings, pool))
    with OpenFiles(settings) as files:
        for item in tqdm(items, desc="labels", unit="image", disable=quiet):
            try:
                for cut in cuts(settings, needed[item.entry], item, files):
                    yield item, cut
            except UnreadableImage as error:
                pool.left_out.append((_name_of(sources, item), str(error)))


def _drawn(places: list[Place], wanted: int, seed: int) -> list[Place]:
    """Return up to `wanted` places of each class, one of each group in turn."""
    rng = np.random.default_rng([seed, 1])
    by_class: dict[Any, dict[str, list[Place]]] = defaultdict(lambda: defaultdict(list))
    for place in places:
        by_class[place.label][place.group].append(place)
    chosen = set()
    for groups in by_class.values():
        queues = [[own[k] for k in rng.permutation(len(own))] for own in groups.values()]
        rng.shuffle(queues)  # else the groups listed first would be drawn where not all can be
        count = 0
        while queues and count < wanted:
            for queue in queues:
                if count < wanted:
                    chosen.add(queue.pop())
                    count += 1
            queues = [queue for queue in queues if queue]
    return [place for place in places if place in chosen]


def _read_scenes(pool: Pool, sources: Sources, settings: DumpSettings, quiet: bool) -> None:
    """Read the pixels of all places; those that cannot be read or used are left out."""
    min_valid = float(settings.transformer.min_valid)
    entries = sources.entries.to_pylist()
    kept: list[tuple[Place, np.ndarray, int, Any]] = []
    by_image: dict[tuple[int, int], list[Place]] = defaultdict(list)
    for place in pool.places:
        by_image[place.entry, place.page].append(place)
    for (k, page), places in tqdm(by_image.items(), desc="images", unit="image", disable=quiet):
        try:
            pixels, stored = _read(entries[k], page, settings)
        except UnreadableImage as error:
            pool.left_out.append((entries[k]["source"], str(error)))
            continue
        for place in places:
            margin = margin_for((place.height, place.width))
            region, mirrored = _surrounded(pixels, place, margin)
            if reason := _unusable(region, margin, min_valid):
                where = f"{entries[k]['source']} row {place.row}, column {place.col}"
                pool.left_out.append((where, reason))
                continue
            region = _without_infinities(region)
            pool.mirrored += mirrored
            kept.append((place, region, margin, stored))
    pool.places = [place for place, *_ in kept]
    _require_classes(pool, "two classes at least are needed")
    kinds = {stored.kind == "f" for *_, stored in kept}
    if len(kinds) > 1:
        raise ValueError(
            "some images hold integers and some floating-point numbers; compare grey images and "
            "height maps apart"
        )
    pool.kind = "height" if kinds.pop() else "grey"
    scales = _full_scales(kept) if pool.kind == "grey" else {}
    pool.scenes = [
        Scene(region, margin, scales.get(str(stored), 1.0)) for _, region, margin, stored in kept
    ]


def _unusable(region: np.ndarray, margin: int, min_valid: float) -> str | None:
    """Return why a patch cannot be used, as `cuts` would say it, or None."""
    patch = Scene(region, margin, 1.0).patch
    if (infinite := _infinities(patch)) is not None and infinite.any():
        return "holds infinite values, which cannot be ranked"
    if (missing := missing_in(patch)) is None:
        return None
    valid = (~missing).astype(np.uint8)
    return refusal(
        float(window_shares(valid, np.zeros((1, 2), np.int64), patch.shape)[0]), min_valid
    )


def _infinities(pixels: np.ndarray) -> np.ndarray | None:
    """Return where valid pixels are infinite; None for integers."""
    if pixels.dtype.kind != "f":
        return None
    return np.isinf(np.ma.getdata(pixels)) & ~np.ma.getmaskarray(pixels)


def _without_infinities(region: np.ndarray) -> np.ndarray:
    """Return a region with infinities masked: beside a patch, they would spread into it."""
    infinite = _infinities(region)
    if infinite is None or not infinite.any():
        return region
    return np.ma.MaskedArray(region, np.ma.getmaskarray(region) | infinite)


def _full_scales(kept: list[tuple]) -> dict[str, float]:
    """Return the largest grey value of each type: of wide types, of as many bits as are used.

    A camera of 12 bits stores 16.
    """
    largest: dict[str, float] = {}
    for _, region, _, stored in kept:
        name = str(stored)
        top = 1.0 if stored.kind == "b" else float(np.iinfo(stored).max)
        if stored.itemsize > 1:
            used = float(np.ma.max(region))
            top = max(largest.get(name, 1.0), 2.0 ** np.ceil(np.log2(max(used, 1.0) + 1)) - 1)
        largest[name] = top
    return largest


def _read(
    entry: dict[str, Any], number_of_page: int, settings: DumpSettings
) -> tuple[np.ndarray, np.dtype]:
    """Return the grey values of an image, masked where some are missing, and the stored type."""
    with open_pages(entry["location"], settings.max_pixels) as pages:
        page: Page = pages[number_of_page]
        pixels = grey_rows(page, 0, page.shape[0], settings.channel)
        stored, declared = page.dtype, page.missing
    missing = missing_pixels(pixels, settings.missing_value, declared)
    if entry["mask_location"] is not None:
        with open_pages(entry["mask_location"], settings.max_pixels) as pages:
            mask = pages[number_of_page if len(pages) > 1 else 0]
            if mask.shape != pixels.shape:
                raise UnreadableImage(f"its mask has {mask.shape} pixels, the image {pixels.shape}")
            gaps = grey_rows(mask.as_labels(), 0, mask.shape[0]) == 0
        missing = gaps if missing is None else missing | gaps
    if missing is not None and missing.any():
        pixels = np.ma.MaskedArray(pixels, missing)
    return pixels, stored


def _surrounded(pixels: np.ndarray, place: Place, margin: int) -> tuple[np.ndarray, bool]:
    """Return a copy of a place with its surroundings, mirrored at its bounds."""
    top, left, bottom, right = place.bounds
    rows, beyond = _mirrored(place.row - margin, place.height + 2 * margin, top, bottom)
    cols, aside = _mirrored(place.col - margin, place.width + 2 * margin, left, right)
    return pixels[np.ix_(rows, cols)], beyond or aside


def _mirrored(start: int, count: int, low: int, high: int) -> tuple[np.ndarray, bool]:
    """Return positions start, start + 1, ... folded back into low <= position < high."""
    length = high - low
    position = np.arange(start, start + count) - low
    folded = position % (2 * length)
    folded = np.where(folded < length, folded, 2 * length - 1 - folded)
    return folded + low, bool((position < 0).any() or (position >= length).any())
