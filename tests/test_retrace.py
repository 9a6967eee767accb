"""From a table back to its images: the same sources, the same settings, and unchanged files."""

import os
import shutil
import uuid

import fsspec
import numpy as np
import pytest
from PIL import Image

from mfeat import MinkowskiCurves, dump
from mfeat.options import dump_settings
from mfeat.parts import InputChanged
from mfeat.pool import labelled_pool
from mfeat.retrace import is_table, table_inputs
from mfeat.sources import list_sources

FEW = MinkowskiCurves(basis="levels", levels=3, smooth=(1.5,), curvature=(), contrast=())


def images(folder, count=2):
    """Write as many images in each of the folders a and b."""
    for c, name in enumerate(("a", "b")):
        (folder / name).mkdir(parents=True)
        for k in range(count):
            pixels = np.random.default_rng([c, k]).integers(0, 255, (40, 56)).astype(np.uint8)
            Image.fromarray(pixels).save(folder / name / f"{k}.png")
    return folder


def dumped(source, out, transformer=FEW, **options):
    dump(source, out, transformer, size=16, jobs=1, progress=False, **options)
    return out


@pytest.fixture
def table(tmp_path):
    return dumped(images(tmp_path / "images"), tmp_path / "table", label_from="folder", stride=8)


def test_sources_and_settings_are_those_of_the_dump(tmp_path, table):
    sources, settings = table_inputs(table)
    expected = list_sources(tmp_path / "images", label_from="folder")
    assert sources.entries.equals(expected.entries)
    assert sources.entries["label"].to_pylist() == ["a", "a", "b", "b"]
    wanted = dump_settings(FEW, size=16, stride=8, label_from="folder")
    assert settings.record() == wanted.record()
    assert settings.transformer.fingerprint() == FEW.fingerprint()


@pytest.mark.parametrize(
    "options",
    [
        {"channel": "red", "max_pixels": 10_000},
        {"missing_value": 7.0, "edge": "shift"},
        {"channel": 0, "truth_rule": "any", "regions": "grid"},
    ],
    ids=str,
)
def test_every_setting_comes_back(tmp_path, options):
    for k in range(2):
        pixels = np.random.default_rng(k).integers(0, 255, (40, 56, 3)).astype(np.uint8)
        Image.fromarray(pixels).save(tmp_path / f"{k}.png")
    out = dumped(tmp_path / "*.png", tmp_path / "table", **options)
    _, settings = table_inputs(out)
    assert settings.record() == dump_settings(FEW, size=16, **options).record()
    assert {name: getattr(settings, name, getattr(settings.grid, name, None)) for name in options
            } == options  # fmt: skip


def test_the_same_patches_are_found_by_either_road(tmp_path, table):
    by_table = labelled_pool(*table_inputs(table), 20, 3, True)
    sources = list_sources(tmp_path / "images", label_from="folder")
    settings = dump_settings(FEW, size=16, stride=8, label_from="folder")
    by_folder = labelled_pool(sources, settings, 20, 3, True)
    assert len(by_table.places) == 40
    assert by_table.places == by_folder.places
    for one, two in zip(by_table.scenes, by_folder.scenes, strict=True):
        np.testing.assert_array_equal(one.region, two.region)


def test_learned_levels_come_back(tmp_path):
    own = MinkowskiCurves(
        basis="levels", level_rule="fitted", levels=3, smooth=(1.5,), curvature=(), contrast=()
    )
    own.fit(np.random.default_rng(0).normal(100, 30, (4, 16, 16)))
    out = dumped(images(tmp_path / "images"), tmp_path / "table", own)
    _, settings = table_inputs(out)
    assert settings.transformer.fingerprint() == own.fingerprint()
    np.testing.assert_array_equal(settings.transformer.levels_["smooth_1.5"],
                                  own.levels_["smooth_1.5"])  # fmt: skip


def write_manifest(tmp_path, pitches):
    images(tmp_path / "images")
    names = [f"images/{c}/{k}.png" for c in "ab" for k in (0, 1)]
    rows = [
        f"{name},l{k % 2},g{k},{pitch},{pitch},um,{k}"
        for k, (name, pitch) in enumerate(zip(names, pitches, strict=True))
    ]
    path = tmp_path / "list.csv"
    path.write_text("path,label,group,pitch_x,pitch_y,unit,serial\n" + "\n".join(rows) + "\n")
    return path


def test_labels_groups_and_the_pitch_of_a_manifest_come_back(tmp_path):
    out = dumped(write_manifest(tmp_path, [5, 5, 5, 5]), tmp_path / "table")
    sources, settings = table_inputs(out)
    assert sources.entries["label"].to_pylist() == ["l0", "l1", "l0", "l1"]
    assert sources.entries["group"].to_pylist() == ["g0", "g1", "g2", "g3"]
    assert settings.transformer._plan().pitch == (5.0, 5.0)
    assert len(labelled_pool(sources, settings, 5, 0, True).places) == 10


def test_images_with_pitches_of_their_own_are_refused(tmp_path):
    out = dumped(write_manifest(tmp_path, [5, 5, 10, 5]), tmp_path / "table")
    with pytest.raises(ValueError, match=r"table have pitches of their own.*name the manifest"):
        table_inputs(out)


# What has changed ---------------------------------------------------------------------------


def test_a_changed_image_is_named(tmp_path, table):
    path = tmp_path / "images" / "b" / "0.png"
    Image.fromarray(np.zeros((40, 56), np.uint8)).save(path)
    os.utime(path, ns=(1, 1))
    with pytest.raises(
        InputChanged,
        match=r"the images of .*table have changed since it was made:\n  inputs changed: "
        r"b/0.png \(size or time\)$",
    ):
        table_inputs(table)


def test_a_lost_image_is_named(tmp_path, table):
    (tmp_path / "images" / "a" / "1.png").unlink()
    with pytest.raises(InputChanged, match=r"inputs changed: a/1.png \(size or time\)"):
        table_inputs(table)


def test_moved_images_are_named(tmp_path, table):
    (tmp_path / "images").rename(tmp_path / "elsewhere")
    with pytest.raises(InputChanged, match=r"a/0.png .*, a/1.png .*, b/0.png .*, b/1.png "):
        table_inputs(table)


def test_the_table_itself_may_be_moved(tmp_path, table):
    expected, settings = table_inputs(table)
    moved = tmp_path / "archive" / "table"
    moved.parent.mkdir()
    shutil.move(table, moved)
    sources, again = table_inputs(moved)
    assert sources.entries.equals(expected.entries)
    assert again.record() == settings.record()


def test_an_image_added_since_is_not_among_the_sources(tmp_path, table):
    # the table's images are those that it was made of
    shutil.copy(tmp_path / "images" / "a" / "0.png", tmp_path / "images" / "a" / "9.png")
    sources, _ = table_inputs(table)
    assert len(sources.entries) == 4


# What is a table ----------------------------------------------------------------------------


def test_a_folder_with_a_manifest_is_a_table(tmp_path, table):
    assert is_table(table)
    assert is_table(str(table))
    assert not is_table(tmp_path / "images")
    assert not is_table(tmp_path / "absent")
    assert not is_table(tmp_path / "images" / "*.png")
    assert not is_table(tmp_path / "images" / "a" / "0.png")
    assert not is_table(3)
    assert not is_table("")
    (table / "manifest.json").unlink()
    assert not is_table(table)


def test_tables_and_images_elsewhere():
    memory = fsspec.filesystem("memory")
    name = uuid.uuid4().hex
    try:
        for k in range(2):
            pixels = np.random.default_rng(k).normal(size=(40, 40)).astype(np.float32)
            with memory.open(f"/{name}/images/{k}.npy", "wb") as stream:
                np.save(stream, pixels)
        source, out = f"memory://{name}/images", f"memory://{name}/table"
        dumped(source, out, backend="threading")
        assert is_table(out)
        assert not is_table(source)
        sources, settings = table_inputs(out)
        assert sources.entries.equals(list_sources(source).entries)
        assert settings.record() == dump_settings(FEW, size=16).record()
        with memory.open(f"/{name}/images/1.npy", "wb") as stream:
            np.save(stream, np.zeros((50, 50)))
        with pytest.raises(InputChanged, match=r"inputs changed: 1.npy \(size or time\)"):
            table_inputs(out)
    finally:
        memory.rm(f"/{name}", recursive=True)
