"""Tables of unusual sources: many pages and regions, odd masks and truths, limits, lost files."""

import csv
import io
import os

import imagecodecs
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import tifffile
from PIL import Image
from sklearn.base import clone

from mfeat import MinkowskiCurves, __version__, cutting, dump, parts, read_table
from mfeat.images import read_image
from mfeat.runs import OutputRefused
from mfeat.sources import list_sources
from mfeat.transformer import full_curves

FEW = MinkowskiCurves(**full_curves() | {"levels": 2, "smooth": (), "band": (), "slope": ()})


def dumped(source, out, transformer=FEW, **options):
    return dump(source, out, transformer, **{"size": 16, "jobs": 1, "progress": False, **options})


def rejects_of(out):
    return pq.read_table(out / "rejects.parquet").to_pylist()


def noise(*shape, seed=0):
    return np.random.default_rng(seed).integers(0, 250, shape).astype(np.uint8)


def write_manifest(path, rows):
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.DictWriter(stream, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
    return path


def counted_openings(monkeypatch):
    """Count how often an image file is opened for its pixels."""
    opened, open_pages = [], cutting.open_pages

    def counting(location, *more):
        opened.append(os.path.basename(location))
        return open_pages(location, *more)

    monkeypatch.setattr(cutting, "open_pages", counting)
    return opened


def test_all_pages_of_a_file_are_read_from_one_opening(tmp_path, monkeypatch):
    pages = noise(20, 16, 32)
    tifffile.imwrite(tmp_path / "a.tif", pages, photometric="minisblack", compression="zlib")
    opened = counted_openings(monkeypatch)
    dumped(tmp_path / "a.tif", tmp_path / "out")
    assert opened == ["a.tif"]
    table = read_table(tmp_path / "out")
    assert table.columns["page"].to_pylist() == [k for k in range(20) for _ in range(2)]
    patches = [page[:, k : k + 16] for page in pages for k in (0, 16)]
    assert np.array_equal(table.X, FEW.transform(patches))


def test_all_regions_of_an_image_are_cut_from_one_decoding(tmp_path, monkeypatch):
    image = noise(64, 64)
    (tmp_path / "a.png").write_bytes(imagecodecs.png_encode(image))
    (tmp_path / "b.png").write_bytes(imagecodecs.png_encode(image.T.copy()))
    rows = [
        {"path": f"{name}.png", "row": row, "col": 3, "height": 20, "width": 30}
        for name in "ab"
        for row in range(0, 40, 4)
    ]
    opened = counted_openings(monkeypatch)
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out")
    assert opened == ["a.png", "b.png"]
    patches = [one[row : row + 20, 3:33] for one in (image, image.T) for row in range(0, 40, 4)]
    assert np.array_equal(read_table(tmp_path / "out").X, FEW.transform(patches))


def test_waiting_patches_of_regions_do_not_keep_their_images(tmp_path, monkeypatch):
    (tmp_path / "a.png").write_bytes(imagecodecs.png_encode(noise(64, 64)))
    rows = [{"path": "a.png", "row": 8, "col": 8, "height": 16, "width": 16}]
    seen, compute = [], parts.vectors_or_reasons

    def looking(plan, patches, min_valid):
        seen.extend(patches)
        return compute(plan, patches, min_valid)

    monkeypatch.setattr(parts, "vectors_or_reasons", looking)
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out")
    base = seen[0]
    while isinstance(base.base, np.ndarray):
        base = base.base
    assert base.size == 16 * 16


@pytest.mark.parametrize("kind", ["npy", "bmp"])
def test_an_image_of_two_labels_may_be_boolean(kind, tmp_path):
    truth = np.zeros((16, 32), dtype=bool)
    truth[3, 20] = True
    np.save(tmp_path / "a.npy", noise(16, 32))
    if kind == "npy":
        np.save(tmp_path / "t.npy", truth)
    else:
        Image.fromarray(truth).save(tmp_path / "t.bmp")
    manifest = write_manifest(tmp_path / "m.csv", [{"path": "a.npy", "truth": f"t.{kind}"}])
    dumped(manifest, tmp_path / "out", label_from="truth", truth_rule="any")
    assert read_table(tmp_path / "out").y.tolist() == [0, 1]


def test_an_infinite_pixel_beside_a_truth_rejects_its_patch_only(tmp_path):
    image = noise(16, 48).astype(np.float32)
    image[4, 20] = np.inf
    np.save(tmp_path / "a.npy", image)
    np.save(tmp_path / "t.npy", np.full((16, 48), 2, dtype=np.uint8))
    manifest = write_manifest(tmp_path / "m.csv", [{"path": "a.npy", "truth": "t.npy"}])
    dumped(manifest, tmp_path / "out", label_from="truth")
    table = read_table(tmp_path / "out")
    assert table.columns["col"].to_pylist() == [0, 32]
    assert table.y.tolist() == [2, 2]
    [reject] = rejects_of(tmp_path / "out")
    assert reject["col"] == 16
    assert "holds inf at row 4, column 20" in reject["reason"]


def test_nan_in_a_carried_column_is_no_change(tmp_path):
    np.save(tmp_path / "a.npy", noise(16, 16))
    table = pa.table({"path": ["a.npy"], "thickness": pa.array([float("nan")])})
    pq.write_table(table, tmp_path / "m.parquet")
    dumped(tmp_path / "m.parquet", tmp_path / "out")
    again = dumped(tmp_path / "m.parquet", tmp_path / "out")
    assert again.kept_parts == again.parts == 1


@pytest.mark.parametrize("pages", [1, 2, 3])
def test_a_mask_has_one_page_or_as_many_as_the_image(pages, tmp_path):
    tifffile.imwrite(tmp_path / "a.tif", noise(3, 16, 16), photometric="minisblack")
    mask = np.full((pages, 16, 16), 255, dtype=np.uint8)
    mask[0, :9] = 0
    tifffile.imwrite(tmp_path / "m.tif", mask, photometric="minisblack")
    manifest = write_manifest(tmp_path / "m.csv", [{"path": "a.tif", "mask": "m.tif"}])
    dumped(manifest, tmp_path / "out", clone(FEW).set_params(min_valid=0))
    fractions = read_table(tmp_path / "out").columns["valid_fraction"].to_pylist()
    assert fractions == {1: [0.4] * 3, 2: [0.4, 1.0], 3: [0.4, 1.0, 1.0]}[pages]
    reasons = [reject["reason"] for reject in rejects_of(tmp_path / "out")]
    assert len(reasons) == (pages == 2)
    assert all("it has 2 pages, so none of number 2" in reason for reason in reasons)


def test_manifests_of_types_that_arrow_cannot_choose_from(tmp_path):
    np.save(tmp_path / "a.npy", noise(16, 16))
    lots = pa.chunked_array(
        [pa.array(["x"]).dictionary_encode(), pa.array(["y"]).dictionary_encode()]
    )
    np.save(tmp_path / "b.npy", noise(16, 16, seed=1))
    table = pa.table({"path": pa.array(["a.npy", "b.npy"], pa.string_view()), "lot": lots})
    with pa.OSFile(str(tmp_path / "m.parquet"), "wb") as stream:
        pq.write_table(table, stream)
    dumped(tmp_path / "m.parquet", tmp_path / "out")
    assert read_table(tmp_path / "out").columns["lot"].to_pylist() == ["x", "y"]


@pytest.mark.parametrize("lost", ["part-00000.parquet", "rejects.parquet", "inputs.arrow"])
def test_a_table_that_lost_a_file_is_not_called_complete(lost, tmp_path):
    np.save(tmp_path / "a.npy", noise(16, 16))
    dumped(tmp_path / "a.npy", tmp_path / "out")
    (tmp_path / "out" / lost).unlink()
    with pytest.raises(OutputRefused, match=f"lacks {lost}.*--fresh"):
        dumped(tmp_path / "a.npy", tmp_path / "out")
    dumped(tmp_path / "a.npy", tmp_path / "out", fresh=True)
    assert len(read_table(tmp_path / "out")) == 1


def test_what_has_to_be_held_at_once_is_limited_for_large_regions_too(tmp_path):
    np.lib.format.open_memmap(tmp_path / "a.npy", "w+", np.uint8, (300, 400))
    rows = [
        {"path": "a.npy", "row": 0, "col": 0, "height": side, "width": side} for side in (20, 300)
    ]
    dumped(write_manifest(tmp_path / "m.csv", rows), tmp_path / "out", max_pixels=1000)
    assert len(read_table(tmp_path / "out")) == 1
    [reject] = rejects_of(tmp_path / "out")
    assert (
        "300 rows of 300 pixels have to be held at once, the limit max_pixels" in reject["reason"]
    )


def test_rows_of_many_strips_are_limited_as_well(tmp_path):
    tifffile.imwrite(
        tmp_path / "a.tif", np.zeros((64, 2000), np.uint8), compression="zlib", rowsperstrip=1
    )
    dumped(tmp_path / "a.tif", tmp_path / "out", max_pixels=30_000)
    [reject] = rejects_of(tmp_path / "out")
    assert "16 rows of 2000 pixels have to be held at once" in reject["reason"]


def test_a_strip_that_decodes_to_more_than_the_directory_says_is_refused(tmp_path):
    stream = io.BytesIO()
    Image.new("L", (1500, 1500)).save(stream, "JPEG")
    with tifffile.TiffWriter(tmp_path / "a.tif") as writer:
        writer.write(
            iter([stream.getvalue()]), shape=(64, 64), dtype=np.uint8, compression="jpeg",
            photometric="minisblack", rowsperstrip=64,
        )  # fmt: skip
    with pytest.raises(ValueError, match="page 0, strip 0: it holds 1500x1500 pixels"):
        read_image(tmp_path / "a.tif")


def test_uris_of_local_files_may_be_escaped(tmp_path):
    (tmp_path / "a b").mkdir()
    np.save(tmp_path / "a b" / "x#1.npy", noise(16, 16))
    dumped((tmp_path / "a b").as_uri(), tmp_path / "out")
    assert len(read_table(tmp_path / "out")) == 1


def test_chained_uris_are_refused_with_a_way_out():
    with pytest.raises(ValueError, match=r"chained URI, .* name its files in a manifest"):
        list_sources("zip://*.npy::file:///tmp/x.zip")


def test_the_summary_names_the_most_frequent_reasons(tmp_path):
    for name in ("x.png", "y.png", "z.png"):
        (tmp_path / name).write_bytes(b"")
    (tmp_path / "text.png").write_text("hello")
    summary = dumped(tmp_path, tmp_path / "out")
    assert summary.reasons[0] == ("empty file", 3, "x.png")
    assert summary.reasons[1][1:] == (1, "text.png")
    assert "3 x empty file, e.g. x.png" in str(summary)
    assert "the table has no row" in str(summary)
    again = dumped(tmp_path, tmp_path / "out")
    assert again.reasons == summary.reasons


def test_a_worker_that_cannot_see_the_output_says_so(tmp_path):
    with pytest.raises(RuntimeError, match="workers need storage that all of them"):
        parts.write_part(str(tmp_path / "elsewhere"), "0" * 12, 0, __version__)


def test_manifests_with_semicolons_are_told_apart(tmp_path):
    (tmp_path / "m.csv").write_text("path;label\na.npy;x\n")
    with pytest.raises(ValueError, match="separate columns with commas"):
        list_sources(tmp_path / "m.csv")


def test_a_scheduler_without_workers_is_told(tmp_path, monkeypatch):
    distributed = pytest.importorskip("dask.distributed")
    np.save(tmp_path / "a.npy", noise(16, 16))
    wait = distributed.Client.wait_for_workers
    monkeypatch.setattr(
        distributed.Client, "wait_for_workers", lambda self, n, timeout: wait(self, n, timeout=0.2)
    )
    with (
        distributed.LocalCluster(n_workers=0, processes=False, dashboard_address=None) as cluster,
        pytest.raises(ValueError, match="has no worker; start some with: dask worker"),
    ):
        dumped(tmp_path / "a.npy", tmp_path / "out", cluster=cluster.scheduler_address)
