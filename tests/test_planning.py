"""Which patches go into which part: equal shares, whatever the sizes of images and workers."""

import heapq

import numpy as np
import pytest
import tifffile

from mfeat import planning
from mfeat.options import dump_settings
from mfeat.planning import make_plan, part_sizes
from mfeat.sources import list_sources


def empty_images(folder, sides):
    """NPY files that take no room on the disk; only their headers are read."""
    folder.mkdir()
    for k, side in enumerate(sides):
        np.lib.format.open_memmap(folder / f"{k}.npy", "w+", np.uint8, (side, side))
    return folder


def planned(source, **options):
    return make_plan(list_sources(source), dump_settings(**options))


def sizes(plan):
    return part_sizes(plan.items, plan.settings.grid.size)


def longest(costs, workers):
    """How long the last worker works, if each takes the dearest part that is left."""
    ends = [0.0] * workers
    for cost in sorted(costs, reverse=True):
        heapq.heapreplace(ends, ends[0] + cost)
    return max(ends)


@pytest.mark.parametrize("workers", [2, 8])
def test_the_load_is_balanced_when_sizes_differ_a_hundredfold(tmp_path, workers):
    sides = [512] * 250 + [5120] * 5 + [512] * 250  # 100 times the pixels
    _, costs = sizes(planned(empty_images(tmp_path / "images", sides)))
    assert len(costs) > 4 * workers
    assert longest(costs, workers) <= 1.1 * costs.sum() / workers


def test_every_patch_is_in_one_part(tmp_path):
    sides = [64, 200, 5000, 30, 640]
    plan = planned(empty_images(tmp_path / "images", sides), size=64, stride=32)
    patches, _ = sizes(plan)
    assert patches.sum() == sum(((side - 64) // 32 + 1) ** 2 for side in sides if side >= 64)
    items = plan.items.to_pylist()
    assert [item["part"] for item in items] == sorted(item["part"] for item in items)
    pieces = [item for item in items if item["entry"] == 2]
    assert len(pieces) > 1
    assert [piece["first"] for piece in pieces] == [0, *(piece["stop"] for piece in pieces[:-1])]
    assert pieces[-1]["stop"] == (5000 - 64) // 32 + 1
    assert [item["reason"] is not None for item in items if item["entry"] == 3] == [True]


def test_parts_grow_with_the_job_but_not_beyond_a_bound(tmp_path, monkeypatch):
    folder = empty_images(tmp_path / "images", [2048] * 40)
    few, costs = sizes(planned(folder))
    assert costs.max() <= 2 * planning._PART_COSTS[0]
    assert len(few) == 40
    monkeypatch.setattr(planning, "_PARTS_WANTED", 4)
    fewer, costs = sizes(planned(folder))
    assert 4 <= len(fewer) <= 5
    assert fewer.sum() == few.sum()
    monkeypatch.setattr(planning, "_PART_COSTS", (1 << 23, 1 << 24))
    assert len(sizes(planned(folder))[0]) > 10


def test_a_compressed_image_is_cut_only_where_it_is_read_in_strips(tmp_path, monkeypatch):
    pixels = np.zeros((1024, 512), dtype=np.uint8)
    tifffile.imwrite(tmp_path / "a.tif", pixels, compression="zlib", rowsperstrip=16)
    monkeypatch.setattr(planning, "_PART_COSTS", (1 << 17, 1 << 17))
    assert len(sizes(planned(tmp_path))[0]) == 1  # decoded whole, so damage rejects the file
    monkeypatch.setattr(planning, "WHOLE_PIXELS", 1 << 16)
    patches, _ = sizes(planned(tmp_path))
    assert len(patches) > 4
    assert patches.sum() == 128


def test_scales_too_large_for_any_patch_are_refused(tmp_path):
    folder = empty_images(tmp_path / "images", [64])
    with pytest.raises(ValueError, match=r"smooth_.*: a length of detail of .* more than 0.5"):
        planned(folder, size=3)
