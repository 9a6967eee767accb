"""The patches of a comparison: where they lie, what surrounds them, their labels, what is left out.

The reference for pixels is `read_image`, which has tests of its own.
"""

from collections import Counter

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import tifffile
from PIL import Image

from mfeat import MinkowskiCurves
from mfeat.conditions import Scene, margin_for
from mfeat.images import read_image
from mfeat.options import dump_settings
from mfeat.packing import packed, unpacked
from mfeat.pool import Pool, halves_pool, labelled_pool
from mfeat.sources import list_sources

SIZE = 16
OWN = MinkowskiCurves(basis="levels", levels=3, smooth=(1.5,), curvature=(), contrast=())


def settings_of(size=SIZE, transformer=OWN, **options):
    return dump_settings(transformer, size=size, **options)


def halves(source, wanted=4, size=SIZE, **options):
    return halves_pool(list_sources(source), settings_of(size, **options), wanted, True)


def labelled(source, wanted=100, seed=0, size=SIZE, label_from=None, **options):
    sources = list_sources(source, label_from=label_from)
    return labelled_pool(
        sources, settings_of(size, label_from=label_from, **options), wanted, seed, True
    )


def grey(shape=(120, 160), seed=0, top=256, dtype=np.uint8):
    return np.random.default_rng(seed).integers(0, top, shape).astype(dtype)


def save(folder, **images):
    """Write images as PNG, or as NPY where they are floats."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, pixels in images.items():
        if pixels.dtype == np.uint8:
            Image.fromarray(pixels).save(folder / f"{name}.png")
        else:
            np.save(folder / f"{name}.npy", pixels)


def manifest(folder, header, *rows):
    path = folder / "list.csv"
    path.write_text("\n".join([header, *rows]) + "\n")
    return path


def by_label(pool):
    return Counter(place.label for place in pool.places)


def spans(places):
    return [(p.row, p.row + p.height, p.col, p.col + p.width) for p in places]


def overlap(one, other):
    return max(one[0], other[0]) < min(one[1], other[1]) and max(one[2], other[2]) < min(
        one[3], other[3]
    )


# Halves: where patches lie ------------------------------------------------------------------


@pytest.mark.parametrize(
    ("shape", "size"),
    [
        ((120, 160), 16), ((121, 161), 16), ((67, 400), 16), ((400, 67), 16), ((64, 64), 16),
        ((120, 160), (12, 31)), ((121, 90), (31, 12)), ((33, 50), 16),
    ],
    ids=str,
)  # fmt: skip
@pytest.mark.parametrize("wanted", [2, 8, 40])
def test_patches_lie_in_their_half_with_nothing_of_the_other_around_them(
    tmp_path, shape, size, wanted
):
    images = {}
    for k, name in enumerate(("one", "two")):
        pixels = grey(shape, k)
        pixels[: shape[0] // 2] %= 100  # the upper half is below 100, the lower from 100
        pixels[shape[0] - shape[0] // 2 :] = 100 + pixels[shape[0] - shape[0] // 2 :] % 100
        if shape[0] % 2:
            pixels[shape[0] // 2] = 255  # the middle row belongs to neither
        images[name] = pixels
    save(tmp_path, **images)
    pool = halves(tmp_path, wanted, size)
    assert pool.classes == ["one.png", "two.png"]
    assert pool.kind == "grey"
    assert len(pool.scenes) == len(pool.places)
    tall, wide = pool.places[0].height, pool.places[0].width
    margin = margin_for((tall, wide))
    mirrored = 0
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        pixels = images[place.label.removesuffix(".png")]
        expected = pixels[place.row : place.row + tall, place.col : place.col + wide]
        np.testing.assert_array_equal(scene.patch, expected)
        assert scene.patch.shape == (tall, wide)
        assert scene.region.shape == (tall + 2 * margin, wide + 2 * margin)
        assert scene.margin == margin
        assert scene.full_scale == 255
        assert place.group == place.label
        if place.half == 0:
            assert scene.region.max() < 100
        else:
            assert scene.region.min() >= 100
            assert scene.region.max() < 200
        top, left, bottom, right = place.bounds
        mirrored += (
            place.row - margin < top or place.col - margin < left
            or place.row + tall + margin > bottom or place.col + wide + margin > right
        )  # fmt: skip
    assert pool.mirrored == mirrored
    for name in pool.classes:
        sides = [spans([p for p in pool.places if (p.label, p.half) == (name, h)]) for h in (0, 1)]
        assert len(sides[0]) == len(sides[1]) >= 2
        assert len(set(sides[0])) == len(sides[0])
        pairs = [overlap(a, b) for k, a in enumerate(sides[0]) for b in sides[0][:k]]
        assert any(pairs) == pool.overlapping
        # the lower half is a copy of the places in the upper one
        shift = shape[0] - shape[0] // 2
        assert [(a + shift, b + shift, c, d) for a, b, c, d in sides[0]] == sides[1]
        if not pool.overlapping and not pool.mirrored:
            continue
        # only where too few separate ones with their surroundings inside would fit
        rows = (shape[0] // 2 - 2 * margin) // tall if shape[0] // 2 >= 2 * margin else 0
        cols = (shape[1] - 2 * margin) // wide if shape[1] >= 2 * margin else 0
        assert rows * cols < wanted


def test_overlapping_patches_share_half_at_most(tmp_path):
    save(tmp_path, one=grey((64, 64)), two=grey((64, 64), 1))
    pool = halves(tmp_path, 50)
    assert pool.overlapping
    found = spans([p for p in pool.places if p.label == "one.png" and p.half == 0])
    for axis in (0, 2):
        starts = np.unique([span[axis] for span in found])
        assert (np.diff(starts) >= SIZE // 2).all()


def test_mirrored_surroundings_are_those_of_numpy(tmp_path):
    save(tmp_path, one=grey((40, 40)), two=grey((40, 40), 1))
    pool = halves(tmp_path, 4)
    assert pool.mirrored == len(pool.places)
    images = {f"{name}.png": read_image(tmp_path / f"{name}.png") for name in ("one", "two")}
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        top, left, bottom, right = place.bounds
        half = images[place.label][top:bottom, left:right]
        m = scene.margin
        around = np.pad(half, 40, mode="symmetric")
        row, col = place.row - top + 40 - m, place.col - left + 40 - m
        np.testing.assert_array_equal(
            scene.region, around[row : row + SIZE + 2 * m, col : col + SIZE + 2 * m]
        )


def test_regions_are_classes_and_are_not_left(tmp_path):
    pixels = grey((80, 200), top=50)
    pixels[:, 100:] += 200
    save(tmp_path, panel=pixels)
    rows = ["panel.png,0,0,80,100", "panel.png,0,100,80,100"]
    pool = halves(manifest(tmp_path, "path,row,col,height,width", *rows), regions="grid")
    assert pool.classes == ["panel.png row 0, column 0", "panel.png row 0, column 100"]
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        left = place.label == pool.classes[0]
        assert (scene.region.max() < 50) if left else (scene.region.min() >= 200)


def test_images_that_are_too_small_are_named(tmp_path):
    save(tmp_path, large=grey(), tiny=grey((20, 30)), narrow=grey((40, 17)))
    with pytest.raises(
        ValueError,
        match=r"2 images too small for two patches of 16x16 pixels in each half: narrow.png "
        r"\(40x17\), tiny.png \(20x30\); use a smaller size, or leave them out",
    ):
        halves(tmp_path)


def test_one_image_is_not_enough(tmp_path):
    save(tmp_path, only=grey())
    (tmp_path / "notes.txt").write_text("no image")
    with pytest.raises(
        ValueError, match=r"two images at least.*found 1 class; 1 left out, e.g. notes.txt: "
    ):
        halves(tmp_path)


def test_pages_of_a_file_are_classes(tmp_path):
    pages = grey((2, 80, 100))
    tifffile.imwrite(tmp_path / "stack.tif", pages, photometric="minisblack")
    save(tmp_path, other=grey())
    pool = halves(tmp_path)
    assert pool.classes == ["other.png", "stack.tif", "stack.tif page 1"]
    assert {place.page for place in pool.places} == {0, 1}
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        if place.label != "other.png":
            rows, cols = (slice(s, s + SIZE) for s in (place.row, place.col))
            np.testing.assert_array_equal(scene.patch, pages[place.page][rows, cols])


def test_a_damaged_file_is_left_out_and_the_others_are_kept(tmp_path):
    save(tmp_path, one=grey(), three=grey(seed=2), two=grey(seed=1))
    content = (tmp_path / "three.png").read_bytes()
    (tmp_path / "three.png").write_bytes(content[: len(content) // 2])
    pool = halves(tmp_path)
    assert pool.classes == ["one.png", "two.png"]
    assert [source for source, _ in pool.left_out] == ["three.png"]
    assert pool.left_out[0][1]


def test_patches_with_too_few_valid_pixels_are_left_out(tmp_path):
    # the edge of a scan: without values, in both halves
    heights = np.random.default_rng(0).normal(size=(2, 120, 160)).astype(np.float32)
    heights[0, :, :40] = np.nan
    save(tmp_path, one=heights[0], two=heights[1])
    pool = halves(tmp_path, 12)
    assert pool.kind == "height"
    valid = [1 - np.isnan(np.asarray(scene.patch)).mean() for scene in pool.scenes]
    assert min(valid) > 0.4
    gone = [reason for source, reason in pool.left_out if source.startswith("one.npy row ")]
    assert gone
    assert all("valid" in reason for reason in gone)
    assert by_label(pool)["one.npy"] + len(gone) == by_label(pool)["two.npy"]
    vectors = OWN.fit_transform([scene.patch for scene in pool.scenes])  # refuses none
    assert np.isfinite(vectors).all()


def test_an_image_without_enough_valid_patches_is_left_out(tmp_path):
    heights = np.random.default_rng(0).normal(size=(3, 120, 160)).astype(np.float32)
    heights[2, :60] = np.nan
    save(tmp_path, one=heights[0], two=heights[1], upper=heights[2])
    pool = halves(tmp_path)
    assert pool.classes == ["one.npy", "two.npy"]
    assert len(pool.scenes) == len(pool.places)
    assert ("upper.npy", "fewer than two usable patches in a half") in pool.left_out
    heights[1] = np.nan
    save(tmp_path, two=heights[1])
    with pytest.raises(ValueError, match="two images at least are needed; found 1 class"):
        halves(tmp_path)


def test_infinities_leave_patches_out_and_do_not_spread_from_beside_them(tmp_path):
    heights = np.random.default_rng(0).normal(size=(2, 120, 160))
    heights[0, 20, 20] = np.inf
    save(tmp_path, one=heights[0], two=heights[1])
    pool = halves(tmp_path, 12)
    assert [reason for _, reason in pool.left_out] == [
        "holds infinite values, which cannot be ranked"
    ]
    assert all(np.isfinite(np.ma.filled(scene.region, 0.0)).all() for scene in pool.scenes)
    beside = [scene for scene in pool.scenes if np.ma.getmaskarray(scene.region).any()]
    assert beside
    assert all(np.ma.getmaskarray(scene.region).sum() == 1 for scene in beside)


# Labels -------------------------------------------------------------------------------------


def folders(root, classes=("a", "b"), images=2, shape=(50, 66)):
    for c, name in enumerate(classes):
        save(root / name, **{f"i{k}": grey(shape, 10 * c + k) for k in range(images)})


def test_labels_from_folders(tmp_path):
    folders(tmp_path)
    pool = labelled(tmp_path, label_from="folder")
    assert pool.classes == ["a", "b"]
    # 50x66 pixels hold 3x4 patches of 16; the image is the group
    assert by_label(pool) == {"a": 24, "b": 24}
    assert {place.group for place in pool.places} == {
        *["a/i0.png", "a/i1.png", "b/i0.png", "b/i1.png"]
    }
    assert {place.half for place in pool.places} == {-1}
    np.testing.assert_array_equal(pool.codes(), np.repeat([0, 1], 24))
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        pixels = read_image(tmp_path / place.group)
        rows, cols = (slice(s, s + SIZE) for s in (place.row, place.col))
        np.testing.assert_array_equal(scene.patch, pixels[rows, cols])
        m = scene.margin
        around = np.pad(pixels, m, mode="symmetric")
        rows, cols = (slice(s, s + SIZE + 2 * m) for s in (place.row, place.col))
        np.testing.assert_array_equal(scene.region, around[rows, cols])


def test_labels_and_groups_from_a_manifest(tmp_path):
    save(tmp_path, one=grey((32, 64)), two=grey((32, 64), 1), three=grey((32, 64), 2))
    path = manifest(
        tmp_path, "path,label,group", "one.png,5,lot1", "two.png,7,lot1", "three.png,5,lot2"
    )
    pool = labelled(path)
    assert pool.classes == ["5", "7"]
    assert by_label(pool) == {"5": 16, "7": 8}
    found = {(place.label, place.group) for place in pool.places}
    assert found == {("5", "lot1"), ("7", "lot1"), ("5", "lot2")}


def test_integer_labels_stay_integers_and_in_order(tmp_path):
    save(tmp_path, **{f"i{k}": grey((32, 32), k) for k in range(3)})
    columns = {"path": [f"i{k}.png" for k in range(3)], "label": [10, 9, -1]}
    pq.write_table(pa.table(columns), tmp_path / "list.parquet")
    pool = labelled(tmp_path / "list.parquet")
    assert pool.classes == [-1, 9, 10]
    np.testing.assert_array_equal(pool.codes(), np.repeat([2, 1, 0], 4))


def test_regions_of_several_sizes(tmp_path):
    pixels = grey()
    save(tmp_path, panel=pixels)
    path = manifest(
        tmp_path,
        "path,label,group,row,col,height,width",
        "panel.png,x,1,0,0,20,30",
        "panel.png,x,2,40,50,17,17",
        "panel.png,y,3,0,60,20,30",
        "panel.png,y,4,90,100,24,20",
    )
    pool = labelled(path)
    assert [(p.row, p.col, p.height, p.width) for p in pool.places] == [
        (0, 0, 20, 30), (40, 50, 17, 17), (0, 60, 20, 30), (90, 100, 24, 20),
    ]  # fmt: skip
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        rows = slice(place.row, place.row + place.height)
        cols = slice(place.col, place.col + place.width)
        np.testing.assert_array_equal(scene.patch, pixels[rows, cols])
        assert scene.margin == margin_for((place.height, place.width))
    cut = labelled(path, regions="grid")
    assert {(p.height, p.width) for p in cut.places} == {(SIZE, SIZE)}


def test_labels_from_truth_images(tmp_path):
    truth = np.zeros((64, 64), np.uint8)
    truth[:, 32:] = 3
    save(tmp_path, one=grey((64, 64)), two=grey((64, 64), 1), truth=truth)
    path = manifest(tmp_path, "path,truth", "one.png,truth.png", "two.png,truth.png")
    pool = labelled(path, label_from="truth")
    assert pool.classes == [0, 3]
    assert all((place.col >= 32) == (place.label == 3) for place in pool.places)
    assert by_label(pool) == {0: 16, 3: 16}


@pytest.mark.parametrize("wanted", [3, 7, 12, 100])
def test_each_group_gives_as_many_where_it_can(tmp_path, wanted):
    save(
        tmp_path, small=grey((16, 32)), middle=grey((32, 48), 1), large=grey((64, 96), 2),
        b1=grey((64, 64), 3), b2=grey((64, 64), 4),
    )  # fmt: skip
    path = manifest(
        tmp_path, "path,label", *(f"{name}.png,a" for name in ("small", "middle", "large")),
        "b1.png,b", "b2.png,b",
    )  # fmt: skip
    pool = labelled(path, wanted)
    counts = Counter(place.group for place in pool.places if place.label == "a")
    there = {"small.png": 2, "middle.png": 6, "large.png": 24}
    assert sum(counts.values()) == min(wanted, 32)
    most = max(counts.values())
    for group, available in there.items():
        assert counts[group] >= min(available, most - 1)
    # in the order of the images, nothing twice
    assert len(set(pool.places)) == len(pool.places)
    assert [p.entry for p in pool.places] == sorted(p.entry for p in pool.places)


def test_draws_follow_from_the_seed_and_favour_no_group(tmp_path):
    folders(tmp_path, images=5)
    drawn = [labelled(tmp_path, 2, seed, label_from="folder").places for seed in range(12)]
    assert drawn[0] == labelled(tmp_path, 2, 0, label_from="folder").places
    assert len({tuple(places) for places in drawn}) == 12
    groups = Counter(place.group for places in drawn for place in places)
    assert len(groups) == 10  # groups listed last are drawn, too
    for places in drawn:
        assert len({place.group for place in places}) == 4


def test_a_file_that_is_no_image_is_listed(tmp_path):
    folders(tmp_path)
    (tmp_path / "a" / "notes.txt").write_text("no image")
    save(tmp_path / "b", small=grey((8, 8)))
    pool = labelled(tmp_path, label_from="folder")
    assert by_label(pool) == {"a": 24, "b": 24}
    left = dict(pool.left_out)
    assert set(left) == {"a/notes.txt", "b/small.png"}
    assert all(left.values())


def test_nothing_but_text_files_says_so(tmp_path):
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        (tmp_path / name / "notes.txt").write_text("no image")
    with pytest.raises(ValueError, match=r"found 0 classes; 2 left out, e.g. a/notes.txt: "):
        labelled(tmp_path, label_from="folder")


def test_masks_and_missing_values(tmp_path):
    pixels = grey((32, 64)) // 2 + 1
    mask = np.full((32, 64), 255, np.uint8)
    mask[:16, :16] = 0  # one patch gone, a corner of another
    mask[:4, 16:20] = 0
    pixels[20, 40] = 0
    save(tmp_path, one=pixels, two=grey((32, 64), 1) // 2 + 1, mask=mask)
    path = manifest(tmp_path, "path,label,mask", "one.png,a,mask.png", "two.png,b,")
    pool = labelled(path, missing_value=0)
    assert by_label(pool) == {"a": 7, "b": 8}
    assert pool.left_out == [("one.png row 0, column 0", "no window of four valid pixels")]
    expected = (mask == 0) | (pixels == 0)
    for place, scene in zip(pool.places, pool.scenes, strict=True):
        rows, cols = (slice(s, s + SIZE) for s in (place.row, place.col))
        found = np.ma.getmaskarray(scene.patch)
        wanted = expected[rows, cols] if place.label == "a" else np.zeros((SIZE, SIZE), bool)
        np.testing.assert_array_equal(found, wanted)
    assert sum(np.ma.getmaskarray(scene.patch).any() for scene in pool.scenes) == 2


def test_patches_without_a_label_are_counted(tmp_path):
    save(tmp_path, one=grey((32, 32)), two=grey((32, 32), 1), three=grey((32, 32), 2))
    path = manifest(tmp_path, "path,label", "one.png,a", "two.png,b", "three.png,")
    pool = labelled(path)
    assert by_label(pool) == {"a": 4, "b": 4}
    assert pool.left_out == [("4 patches", "no label")]


@pytest.mark.parametrize(
    ("rows", "text"),
    [
        (["one.png,,", "two.png,,"], r"no patch has a label; .*label_from.*protocol=\"halves\""),
        (["one.png,a,", "two.png,a,"], "two classes at least are needed; found 1 class$"),
        (["one.png,a,", "tiny.png,b,", "two.png,c,"], r"classes 'b' have one patch each"),
        (
            ["one.png,a,", "gone.png,b,"],
            "two classes at least are needed; found 1 class; 1 left out, e.g. gone.png: ",
        ),
    ],
)
def test_labels_that_will_not_do(tmp_path, rows, text):
    save(tmp_path, one=grey((32, 32)), two=grey((32, 32), 1), tiny=grey((16, 16), 2))
    with pytest.raises(ValueError, match=text):
        labelled(manifest(tmp_path, "path,label,group", *rows))


def test_an_empty_pool_has_no_classes():
    assert Pool([]).classes == []
    assert Pool([]).codes().tolist() == []


# Kinds and scales ---------------------------------------------------------------------------


def test_grey_images_and_heights_are_not_mixed(tmp_path):
    save(tmp_path, grey=grey(), heights=np.random.default_rng(0).normal(size=(120, 160)))
    with pytest.raises(ValueError, match="some images hold integers and some floating-point"):
        halves(tmp_path)


@pytest.mark.parametrize(
    ("dtype", "top", "scale"),
    [
        (np.uint8, 100, 255), (np.uint16, 4096, 4095), (np.uint16, 4095, 4095),
        (np.uint16, 1025, 2047), (np.uint16, 65536, 65535), (np.int16, 200, 255),
        (bool, 2, 1), (np.int8, 100, 127),
    ],
    ids=str,
)  # fmt: skip
def test_the_full_scale_is_that_of_the_bits_in_use(tmp_path, dtype, top, scale):
    for k, name in enumerate(("one", "two")):
        pixels = grey((80, 80), k, top, np.int64)
        pixels[::7] = top - 1
        np.save(tmp_path / f"{name}.npy", pixels.astype(dtype))
    pool = halves(tmp_path)
    assert {scene.full_scale for scene in pool.scenes} == {float(scale)}
    assert {scene.region.dtype for scene in pool.scenes} == {np.dtype(dtype)}


def test_each_type_has_a_full_scale_of_its_own(tmp_path):
    np.save(tmp_path / "a.npy", grey((80, 80), 0, 4000, np.uint16) + 20)
    np.save(tmp_path / "b.npy", grey((80, 80), 1, 1000, np.uint16) + 20)
    save(tmp_path, c=grey((80, 80), 2))
    pool = halves(tmp_path)
    scales = {place.label: scene.full_scale for place, scene in zip(pool.places, pool.scenes,
                                                                   strict=True)}  # fmt: skip
    assert scales == {"a.npy": 4095.0, "b.npy": 4095.0, "c.png": 255.0}


def test_colours_become_luminance_of_the_scale_of_their_type(tmp_path):
    for k, name in enumerate(("one", "two")):
        colours = grey((80, 80, 3), k)
        Image.fromarray(colours).save(tmp_path / f"{name}.png")
    pool = halves(tmp_path)
    assert pool.kind == "grey"
    assert {scene.full_scale for scene in pool.scenes} == {255.0}
    red = halves(tmp_path, channel="red")
    assert {scene.region.dtype for scene in red.scenes} == {np.dtype(np.uint8)}
    assert {scene.region.dtype for scene in pool.scenes} == {np.dtype(np.float32)}


def test_heights_have_no_full_scale(tmp_path):
    save(tmp_path, one=np.ones((80, 80)), two=np.zeros((80, 80)))
    pool = halves(tmp_path)
    assert pool.kind == "height"
    assert {scene.full_scale for scene in pool.scenes} == {1.0}


# Packing ------------------------------------------------------------------------------------


def mixed_scenes():
    rng = np.random.default_rng(0)
    scenes = []
    types = ["uint8", "float32", "uint16", "uint8", "bool", "float64", "int64", "uint8"]
    for k, dtype in enumerate(types):
        region = (rng.random((9 + k, 20 - k)) * 2).astype(dtype)
        if k in (1, 3, 4):
            region = np.ma.MaskedArray(region, rng.random(region.shape) < 0.2)
        scenes.append(Scene(region, k % 4, float(10 + k)))
    scenes[5].region[2, 3] = np.nan
    return scenes


def test_packed_scenes_come_back_as_they_were():
    scenes = mixed_scenes()
    arrays = packed(scenes)
    assert all(isinstance(array, np.ndarray) for array in arrays.values())
    back = unpacked(arrays)
    assert len(back) == len(scenes)
    for one, two in zip(scenes, back, strict=True):
        assert one[1:] == two[1:]
        assert one.region.dtype == two.region.dtype
        assert np.ma.isMaskedArray(one.region) == np.ma.isMaskedArray(two.region)
        np.testing.assert_array_equal(np.ma.getdata(one.region), np.ma.getdata(two.region))
        np.testing.assert_array_equal(
            np.ma.getmaskarray(one.region), np.ma.getmaskarray(two.region)
        )


def test_unpacked_regions_are_views_of_the_arrays():
    # workers map the arrays into memory; a copy of each region would double them
    scenes = [Scene(grey((30, 30), k), 3, 255.0) for k in range(3)]
    arrays = packed(scenes)
    for scene in unpacked(arrays):
        assert np.shares_memory(scene.region, arrays["uint8:pixels"])


def test_packing_nothing():
    assert unpacked(packed([])) == []
