"""`dump`: every value equals that of the image read and transformed by itself; nothing is lost.

The references are `read_image`, `PatchGrid` and `MinkowskiCurves`, which have tests of their own.
"""

import csv
import io
import os
import re
import struct
import sys
import zlib
from collections import Counter
from pathlib import Path

import imagecodecs
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import tifffile
from PIL import Image
from sklearn.base import clone

from mfeat import MinkowskiCurves, PatchGrid, cutting, dump, parts, planning, read_table
from mfeat._tiff import _SegmentedPage
from mfeat.dump import RejectsFound
from mfeat.images import read_image, scan
from mfeat.runs import OutputRefused
from mfeat.sources import natural
from mfeat.transformer import full_curves

FEW = MinkowskiCurves(**full_curves() | {"levels": 3, "smooth": (1,), "band": (), "slope": (0,)})
SIZE = 16


def grey(shape=(40, 56), seed=0, dtype=np.uint8, top=250):
    """Return an image of noise."""
    return np.random.default_rng(seed).integers(0, top, shape).astype(dtype)


def alone(image, transformer=FEW, size=SIZE, mask=None, **options):
    """Return an image's patches and their vectors, computed without a dump."""
    if isinstance(image, Path):
        image = read_image(image, **options)
    patches = PatchGrid(size, min_valid=transformer.min_valid).cut(image, mask)
    return patches, transformer.transform(patches)


def dumped(source, out, transformer=FEW, *, size=SIZE, jobs=1, **options):
    return dump(source, out, transformer, size=size, jobs=jobs, **options)


def same_bits(one, other):
    return (
        one.dtype == other.dtype and one.shape == other.shape and one.tobytes() == other.tobytes()
    )


def rows_of(table, source, page=0):
    columns = table.columns.to_pydict()
    here = [
        k
        for k, (name, number) in enumerate(zip(columns["source"], columns["page"], strict=True))
        if (name, number) == (source, page)
    ]
    return table[np.array(here, dtype=int)]


def check_rows(table, patches, vectors):
    """Hold rows of a table against patches of an image and their vectors."""
    columns = table.columns.to_pydict()
    assert list(zip(columns["row"], columns["col"], strict=True)) == [
        tuple(place) for place in patches.positions.tolist()
    ]
    assert set(zip(columns["height"], columns["width"], strict=True)) == {patches.size}
    assert columns["valid_fraction"] == patches.valid_fractions.tolist()
    assert len(vectors) > 0
    assert same_bits(table.X, vectors)


def rejects_of(out):
    return pq.read_table(Path(out) / "rejects.parquet").to_pylist()


def write_manifest(path, rows):
    with open(path, "w", newline="", encoding="utf-8") as stream:
        writer = csv.DictWriter(stream, rows[0])
        writer.writeheader()
        writer.writerows(rows)
    return path


# Values -------------------------------------------------------------------------------------

with_holes = grey(dtype=np.float32)
with_holes[3:9, 20:30] = np.nan

KINDS = {
    "grey.png": lambda p: p.write_bytes(imagecodecs.png_encode(grey())),
    "grey16.png": lambda p: p.write_bytes(imagecodecs.png_encode(grey(dtype="u2", top=60_000))),
    "colour.png": lambda p: Image.fromarray(grey((40, 56, 3))).save(p),
    "alpha.png": lambda p: Image.fromarray(grey((40, 56, 4))).save(p),
    "palette.png": lambda p: Image.fromarray(grey((40, 56, 3))).quantize(16).save(p),
    "grey.jpg": lambda p: Image.fromarray(grey()).save(p),
    "colour.jpg": lambda p: Image.fromarray(grey((40, 56, 3))).save(p),
    "grey.bmp": lambda p: Image.fromarray(grey()).save(p),
    "mapped.tif": lambda p: tifffile.imwrite(p, grey(dtype=">u2", top=60_000), byteorder=">"),
    "mapped_colour.tif": lambda p: tifffile.imwrite(p, grey((40, 56, 3)), photometric="rgb"),
    "tiled.tif": lambda p: tifffile.imwrite(
        p, grey(dtype="u2", top=60_000), tile=(16, 16), compression="zlib"
    ),
    "strips.tif": lambda p: tifffile.imwrite(
        p, grey(dtype="i4"), rowsperstrip=7, compression="lzw", predictor=True
    ),
    "float_tiled.tif": lambda p: tifffile.imwrite(p, with_holes, tile=(32, 32), compression="zstd"),
    "big.tif": lambda p: tifffile.imwrite(p, with_holes, bigtiff=True),
    "declared.tif": lambda p: tifffile.imwrite(
        p,
        np.where(grey(seed=3) < 9, -99, grey(dtype=np.int16)),
        compression="zlib",
        extratags=[(42113, "s", 0, "-99", True)],  # the no-data value in TIFF files of GDAL
    ),
    "array.npy": lambda p: np.save(p, grey(dtype=np.float64)),
    "fortran.npy": lambda p: np.save(p, np.asfortranarray(grey(dtype="i2"))),
    "holes.npy": lambda p: np.save(p, with_holes),
}


@pytest.fixture(scope="module")
def kinds(tmp_path_factory):
    folder = tmp_path_factory.mktemp("kinds")
    for name, write in KINDS.items():
        write(folder / name)
    with tifffile.TiffWriter(folder / "pages.tif") as writer:
        for seed in range(3):
            writer.write(grey(seed=seed), compression="zlib" if seed == 1 else None)
    np.savez(folder / "arrays.npz", first=grey(), second=grey(seed=1, dtype=np.float64))
    return folder


PAGES = dict.fromkeys(KINDS, 1) | {"pages.tif": 3, "arrays.npz": 2}


@pytest.fixture(scope="module")
def kinds_dumped(kinds, tmp_path_factory):
    out = tmp_path_factory.mktemp("kinds_dumped") / "table"
    return dumped(kinds, out), read_table(out)


@pytest.mark.parametrize(("name", "page"), [(n, p) for n, k in PAGES.items() for p in range(k)])
def test_the_values_of_every_kind_of_file_are_those_of_the_image_alone(
    name, page, kinds, kinds_dumped
):
    patches, vectors = alone(kinds / name, page=page)
    check_rows(rows_of(kinds_dumped[1], name, page), patches, vectors)
    holed = name in ("float_tiled.tif", "big.tif", "holes.npy", "declared.tif")
    assert (patches.valid_fractions.min() < 1) == holed


def test_the_summary_counts_all_kinds(kinds_dumped):
    summary, table = kinds_dumped
    assert (summary.images, summary.rejects) == (len(PAGES), 0)
    assert summary.patches == len(table) == 6 * sum(PAGES.values())
    assert summary.features == len(table.names) == FEW.transform([grey()]).shape[1]
    assert summary.notes == {
        "alpha ignored": 1,
        "one of several arrays": 2,
        "declares -99 to be missing": 1,
    }
    assert summary.fingerprint == table.fingerprint == FEW.fingerprint()
    sources = table.columns["source"].to_pylist()
    assert list(dict.fromkeys(sources)) == sorted(PAGES, key=natural)


@pytest.mark.parametrize("channel", ["red", "blue", 1])
def test_a_channel_of_colours(channel, tmp_path):
    Image.fromarray(grey((40, 56, 3))).save(tmp_path / "colour.png")
    dumped(tmp_path / "colour.png", tmp_path / "out", channel=channel)
    table = read_table(tmp_path / "out")
    check_rows(table, *alone(tmp_path / "colour.png", channel=channel))
    assert table.settings["channel"] == channel


def test_the_default_transformer_with_overlap_and_shifted_edges(tmp_path):
    np.save(tmp_path / "a.npy", grey((75, 90), dtype=np.float32))
    dump(tmp_path / "a.npy", tmp_path / "out", size=(32, 40), stride=(20, 25), edge="shift", jobs=1)
    grid = PatchGrid((32, 40), (20, 25), edge="shift")
    patches = grid.cut(np.load(tmp_path / "a.npy"))
    check_rows(read_table(tmp_path / "out"), patches, MinkowskiCurves().transform(patches))


def test_double_precision_and_fitted_levels(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    transformer = clone(FEW).set_params(level_rule="fitted", slope=(), dtype="float64")
    transformer.fit([grey(seed=5), grey(seed=6)])
    dumped(tmp_path / "a.npy", tmp_path / "out", transformer)
    table = read_table(tmp_path / "out")
    assert table.X.dtype == np.float64
    check_rows(table, *alone(tmp_path / "a.npy", transformer))


def test_a_missing_value(tmp_path):
    image = grey(dtype=np.int16)
    image[10:14, :30] = -999
    tifffile.imwrite(tmp_path / "a.tif", image)
    dumped(tmp_path / "a.tif", tmp_path / "out", missing_value=-999)
    patches, vectors = alone(tmp_path / "a.tif", missing_value=-999)
    check_rows(read_table(tmp_path / "out"), patches, vectors)
    assert patches.valid_fractions.min() < 1  # something was missing
    assert not same_bits(alone(tmp_path / "a.tif")[1], vectors)


@pytest.mark.parametrize("kind", [np.uint8, bool])
def test_a_mask_file(kind, tmp_path):
    mask = np.ones((40, 56), dtype=kind)
    mask[5:12, 10:40] = 0
    for name, image in {"a": grey(), "b": with_holes, "c": grey()}.items():
        tifffile.imwrite(tmp_path / f"{name}.tif", image)
    np.save(tmp_path / "mask.npy", mask)
    rows = [{"path": f"{name}.tif", "mask": "mask.npy"} for name in "ab"]
    rows.append({"path": "c.tif", "mask": ""})
    dumped(write_manifest(tmp_path / "manifest.csv", rows), tmp_path / "out")
    table = read_table(tmp_path / "out")
    for row in rows:
        expected = alone(tmp_path / row["path"], mask=mask != 0 if row["mask"] else None)
        check_rows(rows_of(table, row["path"]), *expected)
    assert table.columns["valid_fraction"].to_numpy().min() < 1


def test_one_mask_for_all_pages_or_one_for_each(tmp_path):
    masks = [grey(seed=k) > 15 for k in range(2)]
    for name, pages in (("image", [grey(), grey(seed=1)]), ("each", masks), ("all", masks[:1])):
        with tifffile.TiffWriter(tmp_path / f"{name}.tif") as writer:
            for page in pages:
                writer.write(page.astype(np.uint8))
    few = clone(FEW).set_params(slope=(), min_valid=0.1)
    for name in ("each", "all"):
        rows = [{"path": "image.tif", "mask": f"{name}.tif"}]
        dumped(write_manifest(tmp_path / "manifest.csv", rows), tmp_path / name, few)
        for page in range(2):
            mask = masks[page if name == "each" else 0]
            expected = alone(tmp_path / "image.tif", few, page=page, mask=mask)
            check_rows(rows_of(read_table(tmp_path / name), "image.tif", page), *expected)


REGIONS = [(0, 0, 16, 16), (3, 5, 20, 31), (24, 30, 16, 26), (0, 0, 40, 56)]


def region_manifest(folder, name):
    rows = [
        {"path": name, "row": row, "col": col, "height": height, "width": width}
        for row, col, height, width in REGIONS
    ]
    return write_manifest(folder / "manifest.csv", rows)


@pytest.mark.parametrize("name", ["a.tif", "a.png"])
def test_regions_are_patches(name, tmp_path):
    Image.fromarray(grey()).save(tmp_path / name)
    dumped(region_manifest(tmp_path, name), tmp_path / "out")
    table = read_table(tmp_path / "out")
    cut = [grey()[row : row + height, col : col + width] for row, col, height, width in REGIONS]
    assert same_bits(table.X, FEW.transform(cut))
    columns = table.columns.select(["row", "col", "height", "width"]).to_pylist()
    assert [tuple(row.values()) for row in columns] == REGIONS


@pytest.mark.parametrize("name", ["a.tif", "a.png"])
def test_regions_have_a_grid_inside(name, tmp_path):
    Image.fromarray(grey()).save(tmp_path / name)
    dumped(region_manifest(tmp_path, name), tmp_path / "out", regions="grid")
    table, start = read_table(tmp_path / "out"), 0
    for row, col, height, width in REGIONS:
        patches, vectors = alone(grey()[row : row + height, col : col + width])
        stop = start + len(patches)
        assert same_bits(table.X[start:stop], vectors)
        places = [table.columns[name].to_numpy()[start:stop] for name in ("row", "col")]
        assert (np.stack(places, axis=1) == patches.positions + np.array([row, col])).all()
        start = stop
    assert start == len(table)


def test_one_pitch_for_all_images_is_that_of_the_transformer(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    rows = [{"path": "a.npy", "pitch_x": 0.5, "pitch_y": 0.25, "unit": "mm"}]
    dumped(write_manifest(tmp_path / "manifest.csv", rows), tmp_path / "out")
    table = read_table(tmp_path / "out")
    pitched = MinkowskiCurves(**FEW.get_params() | {"pitch": (0.25, 0.5)})  # rows, columns
    check_rows(table, *alone(tmp_path / "a.npy", pitched))
    assert table.fingerprint == pitched.fingerprint() == table.transformer.fingerprint()
    assert table.settings["unit"] == "mm"
    assert table.columns["pitch_x"].to_pylist() == [0.5] * 6


def test_a_pitch_for_each_image(tmp_path):
    pitches = [(0.5, 0.25), (0.5, 0.25), (0.1, 0.2), (0.5, 0.25), (1, 1)]
    rows = []
    for k, (x, y) in enumerate(pitches):
        np.save(tmp_path / f"{k}.npy", grey(seed=k))
        rows.append({"path": f"{k}.npy", "pitch_x": x, "pitch_y": y})
    dumped(write_manifest(tmp_path / "manifest.csv", rows), tmp_path / "out")
    table = read_table(tmp_path / "out")
    for k, (x, y) in enumerate(pitches):
        pitched = MinkowskiCurves(**FEW.get_params() | {"pitch": (y, x)})
        check_rows(rows_of(table, f"{k}.npy"), *alone(tmp_path / f"{k}.npy", pitched))
    assert table.settings["vector"]["pitch"] == "per image"
    assert table.transformer.pitch == "per image"


@pytest.mark.parametrize("rule", ["majority", "any"])
@pytest.mark.parametrize("mapped", [True, False])
def test_labels_from_images_of_truth(rule, mapped, tmp_path):
    tall = with_holes.copy()
    tall[:, 40:] = np.nan  # patches of the last column are rejected
    truth = np.zeros((40, 56), dtype=np.uint8)
    truth[:20, 10:30], truth[18, 5], truth[30:, :] = 2, 5, 3
    tifffile.imwrite(tmp_path / "a.tif", tall, compression=None if mapped else "zlib")
    Image.fromarray(truth).save(tmp_path / "truth.png")
    manifest = write_manifest(
        tmp_path / "manifest.csv", [{"path": "a.tif", "truth": "truth.png", "label": "x"}]
    )
    dumped(manifest, tmp_path / "out", label_from="truth", truth_rule=rule)
    patches, vectors = alone(tall)
    expected = patches.label(truth, rule)
    table = read_table(tmp_path / "out")
    check_rows(table, patches, vectors)
    assert table.y.tolist() == expected.labels.tolist()
    assert table.columns["label_fraction"].to_pylist() == expected.fractions.tolist()
    assert len(set(table.y)) > 1
    assert len(expected.labels) < 6  # some were rejected, so that labels could have slipped


def test_colours_of_a_palette_are_labels_by_their_numbers(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    truth = grey(seed=2, top=4)
    image = Image.fromarray(truth, mode="P")
    image.putpalette([200, 0, 0, 0, 200, 0, 0, 0, 200, 9, 9, 9])
    image.save(tmp_path / "truth.png")
    rows = [{"path": "a.npy", "truth": "truth.png"}]
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out", label_from="truth")
    expected = alone(grey())[0].label(truth)
    assert read_table(tmp_path / "out").y.tolist() == expected.labels.tolist()


def test_labels_from_the_manifest_or_from_folders(tmp_path):
    for folder in ("dull", "bright"):
        (tmp_path / folder).mkdir()
        np.save(tmp_path / folder / "a.npy", grey())
    rows = [
        {"path": "dull/a.npy", "label": "7", "group": "g1", "note": "x"},
        {"path": "bright/a.npy", "label": "", "group": "", "note": ""},
    ]
    manifest = write_manifest(tmp_path / "manifest.csv", rows)
    dumped(manifest, tmp_path / "out")
    table = read_table(tmp_path / "out")
    assert table.y.tolist() == ["7"] * 6 + [None] * 6
    assert table.columns["label_fraction"].to_pylist() == [1.0] * 6 + [None] * 6
    assert table.groups.tolist() == ["g1"] * 6 + ["bright/a.npy"] * 6
    assert table.columns["note"].to_pylist() == ["x"] * 6 + [None] * 6
    dumped(tmp_path / "*" / "a.npy", tmp_path / "out2", label_from="folder")
    assert read_table(tmp_path / "out2").y.tolist() == ["bright"] * 6 + ["dull"] * 6


# Bands and parts ----------------------------------------------------------------------------


@pytest.fixture
def small_bands(monkeypatch):
    """Let images of some thousand pixels be large: in strips, in bands of two rows of patches."""
    for module in (planning, cutting):
        monkeypatch.setattr(module, "WHOLE_PIXELS", 1000)
    for module in (cutting, parts):
        monkeypatch.setattr(module, "BAND_PIXELS", 2 * SIZE * 56)


@pytest.fixture
def many_parts(monkeypatch):
    monkeypatch.setattr(planning, "_PART_COSTS", (1, 1))


LARGE = {
    "mapped.tif": {},
    "tiled.tif": {"tile": (16, 16), "compression": "zlib"},
    "strips.tif": {"rowsperstrip": 5, "compression": "lzw"},
    "one_strip.tif": {"compression": "zlib", "rowsperstrip": 120},
}


def large_images(folder):
    image = grey((120, 56), dtype=np.float32)
    image[30:36, 20:40] = np.nan
    for name, options in LARGE.items():
        tifffile.imwrite(folder / name, image, **options)
    np.save(folder / "array.npy", image)
    folder.joinpath("colour.png").write_bytes(imagecodecs.png_encode(grey((120, 56, 3))))
    return folder


def test_images_larger_than_a_band_give_the_same_table(tmp_path, small_bands, monkeypatch):
    source = large_images(tmp_path)
    asked = Counter()
    rows_of_page = _SegmentedPage.rows

    def counting(page, start, stop):
        asked[Path(page._tiff.filehandle.path).name] += 1
        return rows_of_page(page, start, stop)

    monkeypatch.setattr(_SegmentedPage, "rows", counting)
    dumped(source, tmp_path / "table")
    # 7 rows of patches, the band height in rows of patches: 2
    assert asked == {"tiled.tif": 4, "strips.tif": 4, "one_strip.tif": 4}
    monkeypatch.undo()
    table = read_table(tmp_path / "table")
    for name in (*LARGE, "array.npy", "colour.png"):
        check_rows(rows_of(table, name), *alone(source / name))


def test_images_split_into_parts_give_the_same_rows_in_the_same_order(
    tmp_path, small_bands, monkeypatch
):
    source = large_images(tmp_path / "in" if (tmp_path / "in").mkdir() is None else None)
    whole = dumped(source, tmp_path / "whole")
    monkeypatch.setattr(planning, "_PART_COSTS", (1, 1))
    split = dumped(source, tmp_path / "split")
    assert whole.parts == 1
    # 5 images of 7 rows of patches that may be split, and a PNG that may not
    assert split.parts == 5 * 7 + 1
    tables = [read_table(tmp_path / name) for name in ("whole", "split")]
    assert same_bits(tables[0].X, tables[1].X)
    assert tables[0].columns.equals(tables[1].columns)


def test_masks_and_truth_are_read_in_bands_too(tmp_path, small_bands, many_parts):
    image, mask = grey((120, 56)), grey((120, 56), seed=1) > 20
    truth = grey((120, 56), seed=2, top=3)
    tifffile.imwrite(tmp_path / "a.tif", image, tile=(16, 16), compression="zlib")
    tifffile.imwrite(tmp_path / "m.tif", mask.astype("u1"), rowsperstrip=3, compression="zlib")
    tifffile.imwrite(tmp_path / "t.tif", truth, tile=(32, 16), compression="zlib")
    rows = [{"path": "a.tif", "mask": "m.tif", "truth": "t.tif"}]
    summary = dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out", label_from="truth")
    assert summary.parts == 7
    patches, vectors = alone(image, mask=mask)
    table = read_table(tmp_path / "out")
    check_rows(table, patches, vectors)
    assert table.y.tolist() == patches.label(truth).labels.tolist()


@pytest.mark.parametrize("jobs", [2, 3, -1])
def test_parts_do_not_depend_on_the_number_of_workers(jobs, tmp_path, many_parts):
    (tmp_path / "in").mkdir()
    source = large_images(tmp_path / "in")
    for name, count in (("one", 1), ("more", jobs)):
        dumped(source, tmp_path / name, jobs=count)
    names = sorted(path.name for path in (tmp_path / "one").iterdir())
    assert names == sorted(path.name for path in (tmp_path / "more").iterdir())
    assert len(names) > 10
    for name in names:
        if name.endswith(".parquet"):
            assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "more" / name).read_bytes()


def test_many_small_images_share_a_part_and_wait_for_each_other(tmp_path, monkeypatch):
    monkeypatch.setattr(parts, "_BATCH", 5)  # of the 6 patches of an image
    for k in range(9):
        np.save(tmp_path / f"{k}.npy", grey(seed=k, dtype=np.float32 if k % 3 else np.uint8))
    assert dumped(tmp_path, tmp_path / "out").parts == 1
    table = read_table(tmp_path / "out")
    for k in range(9):
        check_rows(rows_of(table, f"{k}.npy"), *alone(tmp_path / f"{k}.npy"))


# Workers ------------------------------------------------------------------------------------


def test_threads_processes_and_one_worker_give_identical_files(kinds, tmp_path, many_parts):
    summaries = {
        "one": dumped(kinds, tmp_path / "one"),
        "threading": dumped(kinds, tmp_path / "threading", jobs=2, backend="threading"),
        "loky": dumped(kinds, tmp_path / "loky", jobs=2, backend="loky"),
    }
    tables = {name: read_table(tmp_path / name) for name in summaries}
    assert len({table.X.tobytes() for table in tables.values()}) == 1
    assert len({summary.parts for summary in summaries.values()}) == 1
    assert summaries["one"].parts > 10
    for part in (tmp_path / "one").glob("*.parquet"):
        assert len({(tmp_path / name / part.name).read_bytes() for name in summaries}) == 1


def test_a_cluster_gives_identical_features(kinds, tmp_path, many_parts):
    distributed = pytest.importorskip("distributed")
    dumped(kinds, tmp_path / "one")
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=False, dashboard_address=None
    ) as cluster:
        summary = dump(kinds, tmp_path / "many", FEW, size=SIZE, cluster=cluster.scheduler_address)
    assert summary.parts > 10
    one, many = (read_table(tmp_path / name) for name in ("one", "many"))
    assert same_bits(one.X, many.X)
    assert one.columns.equals(many.columns)


def test_the_backend_in_force_is_used(tmp_path, monkeypatch):
    import joblib

    np.save(tmp_path / "a.npy", grey())
    seen = []
    parallel = joblib.Parallel.__init__

    def noting(self, *arguments, **options):
        parallel(self, *arguments, **options)
        seen.append(type(self._backend).__name__)

    monkeypatch.setattr(joblib.Parallel, "__init__", noting)
    with joblib.parallel_config(backend="threading"):
        dumped(tmp_path / "a.npy", tmp_path / "out", jobs=2)
    assert set(seen) == {"ThreadingBackend"}
    seen.clear()
    with joblib.parallel_config(backend="loky"):
        dumped(tmp_path / "a.npy", tmp_path / "out2", jobs=2)
    assert set(seen) == {"LokyBackend"}


@pytest.mark.parametrize(
    ("options", "error", "message"),
    [
        ({"jobs": 0}, ValueError, "jobs must be >= 1, or <= -1 .* got 0"),
        ({"jobs": 1.5}, TypeError, "jobs must be an integer"),
        ({"backend": "multiprocessing"}, ValueError, "backend must be one of .*threading.*loky"),
        ({"backend": "loky", "cluster": "tcp://x"}, ValueError, "'loky' and a cluster were given"),
        ({"cluster": 8786}, TypeError, "cluster must be the address of a Dask scheduler; got 8786"),
        ({"cluster": "nowhere://x"}, ValueError, "no Dask scheduler answers at nowhere://x"),
        ({"transformer": 3}, TypeError, "transformer must be a MinkowskiCurves; got 3"),
        ({"out": None}, TypeError, "out must be a path or a URI; got None"),
        ({"label_from": "truth"}, ValueError, "a manifest's column truth"),
        ({"label_from": "manifest"}, ValueError, "a manifest's column label; .* has none"),
        ({"size": 2}, ValueError, "field slope_0 needs images of at least 3x3 pixels; got 2x2"),
    ],
)
def test_what_cannot_be_used_is_said_before_anything_is_written(options, error, message, tmp_path):
    np.save(tmp_path / "a.npy", grey())
    arguments = {"source": tmp_path / "a.npy", "out": tmp_path / "out", "transformer": FEW}
    with pytest.raises(error, match=message):
        dump(**{**arguments, "size": SIZE, "jobs": 1, **options})
    assert not (tmp_path / "out").exists() or list((tmp_path / "out").iterdir()) == []


def test_without_dask_it_is_said_what_to_install(tmp_path, monkeypatch):
    np.save(tmp_path / "a.npy", grey())
    monkeypatch.setitem(sys.modules, "dask.distributed", None)
    with pytest.raises(ImportError, match="pip install dask distributed"):
        dump(tmp_path / "a.npy", tmp_path / "out", FEW, cluster="tcp://127.0.0.1:1")


# Rejects ------------------------------------------------------------------------------------


def png_chunk(kind, content):
    return struct.pack(">I", len(content)) + kind + content + struct.pack(
        ">I", zlib.crc32(kind + content)
    )  # fmt: skip


def png_of(rows, cols):
    """Return a PNG of a few bytes whose header promises an image of any size."""
    head = png_chunk(b"IHDR", struct.pack(">IIBBBBB", cols, rows, 8, 0, 0, 0, 0))
    body = png_chunk(b"IDAT", zlib.compress(bytes(1000)))
    return b"\x89PNG\r\n\x1a\n" + head + body + png_chunk(b"IEND", b"")


def saved(write, *arguments, **options):
    stream = io.BytesIO()
    write(stream, *arguments, **options)
    return stream.getvalue()


def flipped(content, place):
    """Return bytes with some in the middle changed."""
    at = int(len(content) * place)
    return content[:at] + bytes(b ^ 0xFF for b in content[at : at + 8]) + content[at + 8 :]


def damaged_files():
    """Return {name: (content, what the reason says)}."""
    png = imagecodecs.png_encode(grey())
    tiff = saved(tifffile.imwrite, grey(), compression="zlib", rowsperstrip=40)
    plain = saved(tifffile.imwrite, grey(), photometric="minisblack")
    jpeg = saved(Image.fromarray(grey()).save, format="JPEG")
    npy = saved(np.save, grey())
    chain = saved(tifffile.imwrite, np.stack([grey(), grey()]), photometric="minisblack")
    return {
        "empty.tif": (b"", "empty file"),
        "text.png": (b"no image at all", "not an image: it starts with b'no image'"),
        "cut.png": (png[: len(png) // 2], "."),
        "flipped.png": (flipped(png, 0.5), "."),
        "head.png": (png[:20], "no image header"),
        "bomb.png": (png_of(60_000, 60_000), "too large: 3600000000 pixels"),
        "promise.png": (png_of(40, 56), "."),
        "tiny.png": (png_of(1, 1), "1x1 pixels; at least 2x2"),
        "cut.jpg": (jpeg[: len(jpeg) // 2], "truncated"),
        "cmyk.jpg": (
            saved(Image.new("CMYK", (56, 40)).save, format="JPEG"), "colour model CMYK"
        ),
        "cut.bmp": (saved(Image.fromarray(grey()).save, format="BMP")[:1500], "truncated"),
        "cut.tif": (plain[:-500], "truncated"),
        "flipped.tif": (flipped(tiff, 0.6), "damaged TIFF at page 0, strip 0"),
        "chain.tif": (chain[: len(chain) - 3000], "TIFF"),
        "cut.npy": (npy[:-1], "truncated NPY: 2239 of 2240 bytes"),
        "objects.npy": (saved(np.save, np.array([[{}] * 3] * 3), allow_pickle=True), "object"),
        "complex.npy": (saved(np.save, grey().astype(complex)), "type complex128"),
        "row.npy": (saved(np.save, np.arange(5)), r"array of shape \(5,\)"),
        "small.npy": (saved(np.save, grey((15, 99))), "15x99 pixels is smaller than a patch"),
        "flipped.npz": (flipped(saved(np.savez_compressed, grey()), 0.5), "."),
        "picture.gif": (saved(Image.fromarray(grey()).save, format="GIF"), "not an image"),
    }  # fmt: skip


def test_every_file_is_in_the_table_or_in_the_rejects(kinds, tmp_path):
    source = tmp_path / "in"
    source.mkdir()
    bad = damaged_files()
    assert len(bad) >= 15
    for name, (content, _) in bad.items():
        (source / name).write_bytes(content)
    (source / "gone.png").symlink_to("nowhere.png")
    bad["gone.png"] = (None, "there is no such file")
    for path in kinds.iterdir():
        os.link(path, source / f"good_{path.name}")
    summary = dumped(source, tmp_path / "out")
    table, rejects = read_table(tmp_path / "out"), rejects_of(tmp_path / "out")
    listed = {path.name for path in source.iterdir()}
    used, refused = set(table.columns["source"].to_pylist()), [r["source"] for r in rejects]
    assert used == {f"good_{name}" for name in PAGES}
    assert sorted(refused) == sorted(bad)  # each once
    assert listed == used | set(refused)
    for row in rejects:
        assert (row["row"], row["col"]) == (None, None)
        assert re.search(bad[row["source"]][1], row["reason"]), row
        assert "\n" not in row["reason"]
        assert str(tmp_path) not in row["reason"]
    assert (summary.rejects, summary.rejected_images) == (len(bad), len(bad))
    assert f"{len(bad)} rejects ({len(bad)} whole images) listed with reasons in" in str(summary)
    # and what is good has the values it has among good ones
    check_rows(rows_of(table, "good_tiled.tif"), *alone(kinds / "tiled.tif"))


def test_strict_raises_after_the_table_is_complete(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    (tmp_path / "b.png").write_bytes(b"")
    with pytest.raises(RejectsFound, match=r"1 rejects are listed in .*rejects\.parquet") as caught:
        dumped(tmp_path, tmp_path / "out", strict=True)
    assert caught.value.summary.rejects == 1
    assert len(read_table(tmp_path / "out")) == 6
    (tmp_path / "in").mkdir()
    np.save(tmp_path / "in" / "a.npy", grey())
    assert dumped(tmp_path / "in", tmp_path / "out2", strict=True).rejects == 0


def test_a_limit_of_pixels(tmp_path):
    for name, shape in (("a", (40, 56)), ("b", (60, 60))):
        (tmp_path / f"{name}.png").write_bytes(imagecodecs.png_encode(grey(shape)))
    dumped(tmp_path, tmp_path / "out", max_pixels=3000)
    (reject,) = rejects_of(tmp_path / "out")
    assert reject["source"] == "b.png"
    assert "3600 pixels of an image of 60x60" in reject["reason"]
    assert "max_pixels is 3000" in reject["reason"]


def test_patches_with_too_little_valid_data_are_rejected_one_by_one(tmp_path):
    image = grey(dtype=np.float64)
    image[:16, :16] = np.nan
    image[16:32, 32:45] = np.nan
    np.save(tmp_path / "a.npy", image)
    dumped(tmp_path / "a.npy", tmp_path / "out")
    check_rows(read_table(tmp_path / "out"), *alone(image))
    rejects = rejects_of(tmp_path / "out")
    assert [(r["row"], r["col"]) for r in rejects] == [(0, 0), (16, 32)]
    # by hand: 13 of 16 columns missing leave 2 of 15 columns of windows
    assert "0.133" in rejects[1]["reason"]
    assert "min_valid" in rejects[1]["reason"]


def test_a_rejected_patch_tells_the_page_it_is_of(tmp_path):
    holes, huge = grey(dtype=np.float64), grey(dtype=np.float64)
    holes[:16, :16], huge[20, 3], huge[0, 0] = np.nan, 1e80, np.inf
    with tifffile.TiffWriter(tmp_path / "a.tif") as writer:
        for page in (holes, holes, huge):
            writer.write(page)
    dumped(tmp_path / "a.tif", tmp_path / "out")
    rejects = rejects_of(tmp_path / "out")
    assert [(r["row"], r["col"]) for r in rejects] == [(0, 0), (0, 0), (0, 0), (16, 0)]
    pages = [re.match(r"page (\d): ", r["reason"]) for r in rejects]
    assert [page and page[1] for page in pages] == [None, "1", "2", "2"]  # as of whole images


def test_infinite_pixels_reject_their_patches_only(tmp_path):
    image = with_holes.copy()
    image[2, 50], image[17, 1], image[39, 0] = np.inf, -np.inf, np.inf  # column 50 is in no patch
    image[20, 40] = np.inf
    tifffile.imwrite(tmp_path / "a.tif", image)
    mask = np.ones(image.shape, dtype=np.uint8)
    mask[20, 40] = 0  # a masked infinity is missing
    np.save(tmp_path / "mask.npy", mask)
    rows = [{"path": "a.tif", "mask": "mask.npy"}]
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out")
    (reject,) = rejects_of(tmp_path / "out")
    assert (reject["row"], reject["col"]) == (16, 0)
    assert "holds -inf at row 17, column 1; infinite values" in reject["reason"]
    finite = np.where(np.isinf(image), np.nan, image)
    patches, vectors = alone(finite, mask=mask != 0)
    table = read_table(tmp_path / "out")
    kept = [k for k, place in enumerate(patches.positions.tolist()) if place != [16, 0]]
    assert same_bits(table.X, vectors[kept])


def test_pixels_that_cannot_be_computed_reject_their_patches_only(tmp_path):
    image = grey(dtype=np.float64)
    image[3, 40] = 1e80  # beyond what means are taken of
    big = grey(dtype=np.int64)
    big[20, 3] = 2**60
    np.save(tmp_path / "a.npy", image)
    np.save(tmp_path / "b.npy", big)
    dumped(tmp_path, tmp_path / "out")
    rejects = rejects_of(tmp_path / "out")
    assert [(r["source"], r["row"], r["col"]) for r in rejects] == [
        ("a.npy", 0, 32),
        ("b.npy", 16, 0),
    ]
    assert all(r["reason"].startswith("the patch ") for r in rejects)
    table = read_table(tmp_path / "out")
    assert len(table) == 10
    kept = [0, 1, 3, 4, 5]
    patches = PatchGrid(SIZE).cut(image)
    assert same_bits(rows_of(table, "a.npy").X, FEW.transform([patches[k] for k in kept]))


@pytest.mark.parametrize("what", ["mask", "truth"])
def test_an_unusable_mask_or_truth_rejects_the_image(what, tmp_path):
    for name in "abcde":
        np.save(tmp_path / f"{name}.npy", grey())
    np.save(tmp_path / "wide.npy", np.ones((40, 57), dtype=np.uint8))
    np.save(tmp_path / "real.npy", np.ones((40, 56)))
    (tmp_path / "empty.png").write_bytes(b"")
    good = np.ones((40, 56), dtype=np.uint8)
    np.save(tmp_path / "good.npy", good)
    names = ["wide.npy", "real.npy", "empty.png", "nowhere.png", "good.npy"]
    rows = [{"path": f"{k}.npy", what: name} for k, name in zip("abcde", names, strict=True)]
    label_from = "truth" if what == "truth" else None
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out", label_from=label_from)
    reasons = {r["source"]: r["reason"] for r in rejects_of(tmp_path / "out") if r["row"] is None}
    assert set(read_table(tmp_path / "out").columns["source"].to_pylist()) == {"e.npy"}
    expected = {
        "a.npy": "it has 40x57 pixels, the image 40x56",
        "b.npy": "pixels of 1 x float64; one bool or integer a pixel is needed",
        "c.npy": "empty file",
        "d.npy": "there is no such file",
    }
    assert {name: reason.rsplit(": ", 1)[-1] for name, reason in reasons.items()} == expected
    assert all(reason.startswith(f"{what} ") for reason in reasons.values())
    assert len(rejects_of(tmp_path / "out")) == 4


@pytest.mark.parametrize("name", ["wide.npy", "real.npy", "empty.png"])
def test_an_unusable_mask_loses_no_patch_of_a_split_image(name, tmp_path, many_parts):
    np.save(tmp_path / "a.npy", grey())
    np.save(tmp_path / "wide.npy", np.ones((40, 57), dtype=np.uint8))
    np.save(tmp_path / "real.npy", np.ones((40, 56)))
    (tmp_path / "empty.png").write_bytes(b"")
    manifest = write_manifest(tmp_path / "m.csv", [{"path": "a.npy", "mask": name}])
    assert dumped(manifest, tmp_path / "out").parts == 2
    assert len(read_table(tmp_path / "out")) == 0
    check_nothing_is_lost(tmp_path, tmp_path / "out", ["a.npy"])


def test_regions_outside_the_image_or_too_small_are_rejected(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    regions = [(0, 0, 16, 16), (30, 0, 16, 16), (0, 50, 4, 7), (0, 0, 2, 16)]
    rows = [
        {"path": "a.npy", "row": r, "col": c, "height": h, "width": w} for r, c, h, w in regions
    ]
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out")
    rejects = rejects_of(tmp_path / "out")
    assert [(r["row"], r["col"]) for r in rejects] == [(30, 0), (0, 50), (0, 0)]
    assert (
        "region of 16x16 pixels at row 30, column 0 reaches outside the image of 40x56"
        in (rejects[0]["reason"])
    )
    assert "at least 3x3 pixels; got 2x16" in rejects[2]["reason"]
    assert len(read_table(tmp_path / "out")) == 1


def damage_strip(path, index):
    """Change the bytes of one compressed strip or tile in place."""
    with tifffile.TiffFile(path) as tiff:
        offset, size = tiff.pages[0].dataoffsets[index], tiff.pages[0].databytecounts[index]
    content = bytearray(path.read_bytes())
    content[offset : offset + size] = bytes(size)
    path.write_bytes(content)


@pytest.mark.parametrize("split", [False, True])
def test_damage_inside_a_large_image_rejects_the_patches_that_need_it(
    split, tmp_path, small_bands, monkeypatch
):
    if split:
        monkeypatch.setattr(planning, "_PART_COSTS", (1, 1))
    path = tmp_path / "a.tif"
    image = grey((120, 56))
    tifffile.imwrite(path, image, rowsperstrip=8, compression="zlib")
    damage_strip(path, 5)  # rows 40 to 47: those of patches at row 32
    summary = dumped(path, tmp_path / "out")
    rejects = rejects_of(tmp_path / "out")
    assert [(r["row"], r["col"]) for r in rejects] == [(32, 0), (32, 16), (32, 32)]
    assert all("damaged TIFF at page 0, strip 5" in r["reason"] for r in rejects)
    assert summary.rejected_images == 0
    patches = PatchGrid(SIZE).cut(image)
    kept = [k for k in range(len(patches)) if patches.positions[k, 0] != 32]
    assert same_bits(read_table(tmp_path / "out").X, FEW.transform([patches[k] for k in kept]))


def test_damage_inside_an_image_of_moderate_size_rejects_it_whole(tmp_path):
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, grey((120, 56)), rowsperstrip=8, compression="zlib")
    damage_strip(path, 14)  # the last one
    dumped(path, tmp_path / "out")
    (reject,) = rejects_of(tmp_path / "out")
    assert reject["row"] is None
    assert len(read_table(tmp_path / "out")) == 0


def test_a_piece_of_an_image_that_cannot_be_opened_is_not_lost(tmp_path, many_parts, monkeypatch):
    """A fault of the machine while one piece of a split image is read must not lose its patches."""
    np.save(tmp_path / "a.npy", grey((120, 56)))
    opened, open_pages = Counter(), cutting.open_pages

    def failing(location, max_pixels):
        opened[location] += 1
        if opened[location] == 4:
            raise cutting.UnreadableImage("too large for the memory of this machine")
        return open_pages(location, max_pixels)

    monkeypatch.setattr(cutting, "open_pages", failing)
    summary = dumped(tmp_path / "a.npy", tmp_path / "out")
    assert summary.parts == 7
    check_nothing_is_lost(tmp_path, tmp_path / "out", ["a.npy"])


# Law: nothing is lost -----------------------------------------------------------------------


def check_nothing_is_lost(source, out, names):
    """Every patch of every page is a row or a reject, once; or its whole image is a reject."""
    columns = read_table(out).columns.select(["source", "page", "row", "col"]).to_pylist()
    seen = Counter(tuple(row.values()) for row in columns)
    assert set(seen.values()) <= {1}
    table, rejects = Counter(), Counter()
    for row in columns:
        table[row["source"], row["row"], row["col"]] += 1
    for row in rejects_of(out):
        rejects[row["source"], row["row"], row["col"]] += 1
    for name in names:
        if (name, None, None) in rejects:
            assert not any(key[0] == name for key in table)
            continue
        expected = Counter()
        for info in scan(str(source / name)):
            places = PatchGrid(SIZE).positions(info.shape).tolist()
            expected.update((name, *place) for place in places)
        both = Counter({key: n for key, n in (table + rejects).items() if key[0] == name})
        assert both == expected, name
    assert {key[0] for key in table + rejects} == set(names)


@pytest.mark.parametrize("seed", range(6))
def test_nothing_is_lost_whatever_the_images_hold(seed, tmp_path, small_bands, monkeypatch):
    rng = np.random.default_rng(seed)
    monkeypatch.setattr(planning, "_PART_COSTS", (int(rng.integers(1, 200_000)),) * 2)
    monkeypatch.setattr(parts, "_BATCH", int(rng.integers(1, 40)))
    source = tmp_path / "in"
    source.mkdir()
    bad = damaged_files()
    for k in range(12):
        image = rng.normal(size=rng.integers(14, 130, 2)).astype(rng.choice(["f4", "f8"]))
        for hole in (np.nan, np.nan, np.inf, 1e80):
            row, col = (int(rng.integers(0, side)) for side in image.shape)
            tall, wide = rng.integers(0, 60, 2) if np.isnan(hole) else (1, 1)
            if rng.random() < 0.6 and (hole != 1e80 or image.dtype == np.float64):
                image[row : row + tall, col : col + wide] = hole
        kind = rng.integers(5)
        if kind == 0:
            np.save(source / f"{k}.npy", image)
        elif kind == 1:
            tifffile.imwrite(source / f"{k}.tif", image, rowsperstrip=int(rng.integers(1, 60)))
        elif kind in (2, 3):
            path, pages = source / f"{k}.tif", int(rng.integers(1, 4))
            with tifffile.TiffWriter(path) as writer:
                for _ in range(pages):
                    writer.write(image, tile=(16, 32), compression="zlib")
            if kind == 3:
                damage_strip(path, 0)
        else:
            name = str(rng.choice(sorted(bad)))
            (source / f"{k}_{name}").write_bytes(bad[name][0])
    dumped(source, tmp_path / "out", jobs=int(rng.integers(1, 3)))
    check_nothing_is_lost(source, tmp_path / "out", [path.name for path in source.iterdir()])


# Output -------------------------------------------------------------------------------------


def test_an_output_inside_the_source_is_not_listed(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    for _ in range(2):
        assert dumped(tmp_path, tmp_path / "table").images == 1


def test_an_output_with_other_files_is_refused(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "notes.txt").write_text("keep")
    for fresh in (False, True):
        with pytest.raises(OutputRefused, match=r"holds other files, e\.g\. notes\.txt"):
            dumped(tmp_path / "a.npy", tmp_path / "mine", fresh=fresh)
    (tmp_path / "mine" / "manifest.json").write_text('{"somebody": "else"}')
    with pytest.raises(OutputRefused, match=r"manifest\.json is no manifest of a feature table"):
        dumped(tmp_path / "a.npy", tmp_path / "mine", fresh=True)
    assert sorted(p.name for p in (tmp_path / "mine").iterdir()) == ["manifest.json", "notes.txt"]


def test_an_output_that_is_a_file_is_refused(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    (tmp_path / "file").write_text("")
    for out in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(OutputRefused, match="is a file, or lies below one; name a folder"):
            dumped(tmp_path / "a.npy", out)


def test_what_lies_in_a_complete_table(tmp_path, many_parts):
    np.save(tmp_path / "a.npy", grey())
    (tmp_path / "b.png").write_bytes(b"")
    summary = dumped(tmp_path, tmp_path / "out")
    names = sorted(path.name for path in (tmp_path / "out").iterdir())
    numbered = [f"part-{k:05d}.parquet" for k in range(summary.parts)]
    assert names == ["inputs.arrow", "manifest.json", *numbered, "rejects.parquet"]
    assert pq.read_schema(tmp_path / "out" / "rejects.parquet").names == [
        "source", "row", "col", "reason"
    ]  # fmt: skip


def test_rejects_are_written_where_there_are_none(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    dumped(tmp_path / "a.npy", tmp_path / "out")
    assert rejects_of(tmp_path / "out") == []


def test_a_folder_with_nothing_usable_gives_a_table_without_rows(tmp_path):
    (tmp_path / "a.png").write_bytes(b"")
    summary = dumped(tmp_path, tmp_path / "out")
    assert (summary.patches, summary.rejects, summary.images) == (0, 1, 1)
    table = read_table(tmp_path / "out")
    assert table.X.shape == (0, len(FEW.get_feature_names_out()))


def test_an_empty_source_is_an_error(tmp_path):
    (tmp_path / "in").mkdir()
    with pytest.raises(FileNotFoundError, match="has no image"):
        dumped(tmp_path / "in", tmp_path / "out")
    with pytest.raises(FileNotFoundError, match="does not exist"):
        dumped(tmp_path / "nowhere", tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_carried_columns_that_clash_are_refused(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    rows = [{"path": "a.npy", "raw_mean": "x", "valid_fraction": "y"}]
    manifest = write_manifest(tmp_path / "m.csv", rows)
    with pytest.raises(ValueError, match=r"columns \['raw_mean', 'valid_fraction'\] have names"):
        dumped(manifest, tmp_path / "out", FEW)


def test_text_keeps_its_characters(tmp_path):
    (tmp_path / "Lack weiß").mkdir()
    np.save(tmp_path / "Lack weiß" / "Prüfung 1.npy", grey())
    dumped(tmp_path / "Lack weiß" / "*.npy", tmp_path / "aus weiß", label_from=None)
    dumped(tmp_path, tmp_path / "out", label_from="folder")
    table = read_table(tmp_path / "out")
    assert table.columns["source"].to_pylist() == ["Lack weiß/Prüfung 1.npy"] * 6
    assert table.y.tolist() == ["Lack weiß"] * 6


def test_progress_is_shown_on_request_only(tmp_path, capsys):
    np.save(tmp_path / "a.npy", grey())
    dumped(tmp_path / "a.npy", tmp_path / "out")
    assert capsys.readouterr().err == ""  # no terminal
    dumped(tmp_path / "a.npy", tmp_path / "out2", progress=True)
    assert re.search(r"patches: 100%.*6\.00/6\.00 .*patch/s", capsys.readouterr().err)
    dumped(tmp_path / "a.npy", tmp_path / "out3", progress=False)
    assert capsys.readouterr().err == ""


def test_a_parquet_manifest_with_typed_columns(tmp_path):
    np.save(tmp_path / "a.npy", grey())
    manifest = pa.table({"path": ["a.npy"], "label": [4], "when": pa.array([0], pa.timestamp("s"))})
    pq.write_table(manifest, tmp_path / "m.parquet")
    dumped(tmp_path / "m.parquet", tmp_path / "out")
    table = read_table(tmp_path / "out")
    assert table.y.dtype.kind == "i"
    assert table.y.tolist() == [4] * 6
    assert pa.types.is_timestamp(table.columns["when"].type)
