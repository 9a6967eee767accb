"""Sources: folders, patterns and single files, on disk and on other file systems; manifests."""

import csv
import json
import os
import uuid

import fsspec
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from mfeat.images import UnreadableImage, scan
from mfeat.sources import list_sources, natural


def put(folder, *names, content=b"x"):
    for name in names:
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(content)


def entries_of(source, **options):
    return list_sources(source, **options).entries


def names_of(source, **options):
    return entries_of(source, **options)["source"].to_pylist()


def write_csv(folder, text, encoding="utf-8"):
    path = folder / "list.csv"
    path.write_bytes(text.encode(encoding))
    return path


def write_parquet(folder, columns):
    path = folder / "list.parquet"
    pq.write_table(columns if isinstance(columns, pa.Table) else pa.table(columns), path)
    return path


@pytest.fixture
def memory():
    """A folder of its own on the file system in memory, as a URI, and the file system."""
    found = fsspec.filesystem("memory")
    name = uuid.uuid4().hex
    yield f"memory://{name}", lambda path, content=b"x": found.pipe(f"/{name}/{path}", content)
    if found.exists(f"/{name}"):
        found.rm(f"/{name}", recursive=True)


# Folders


def test_a_folder_is_listed_in_natural_order_with_all_that_is_below(tmp_path):
    put(tmp_path, "b/c/1.npy", "a10.tif", "b/10.png", "a9.tif", "b/9.png", "a1.tif", "notes.txt")
    expected = ["a1.tif", "a9.tif", "a10.tif", "b/9.png", "b/10.png", "b/c/1.npy", "notes.txt"]
    found = entries_of(tmp_path)
    assert found["source"].to_pylist() == expected
    assert found["location"].to_pylist() == [str(tmp_path / name) for name in expected]
    assert found.num_rows == found["stamp"].null_count + 7


def test_natural_order_is_that_of_the_numbers():
    numbers = np.random.default_rng(3).permutation(1200).tolist()
    names = [f"scan{number}_of_9.tif" for number in numbers]
    assert sorted(names, key=natural) == [f"scan{number}_of_9.tif" for number in range(1200)]


def test_natural_order_tells_all_names_apart():
    names = ["1", "01", "001", "a", "a1", "1a", "1a1", "", "a01", "a1b", "a/1", "a-1"]
    keys = [natural(name) for name in names]
    assert all(one < other or other < one for one in keys for other in keys if one is not other)


def test_hidden_files_and_folders_are_left_out(tmp_path):
    put(tmp_path, "a.tif", ".b.tif", ".cache/c.tif", "d/.e/f.tif", "d/.g.tif", "d/h.tif")
    assert names_of(tmp_path) == ["a.tif", "d/h.tif"]
    assert names_of(f"{tmp_path}/*") == ["a.tif"]
    assert names_of(f"{tmp_path}/**/*.tif") == ["a.tif", "d/h.tif"]
    assert names_of(tmp_path / ".cache") == ["c.tif"]  # asked for by name


def test_links_are_followed_once(tmp_path):
    put(tmp_path, "elsewhere/x.tif", "scans/a.tif", "scans/deep/b.tif")
    scans = tmp_path / "scans"
    (scans / "file.tif").symlink_to(scans / "a.tif")
    (scans / "linked").symlink_to(tmp_path / "elsewhere")
    (scans / "again").symlink_to(tmp_path / "elsewhere")
    (scans / "deep" / "up").symlink_to(scans)
    (scans / "deep" / "here").symlink_to(scans / "deep")
    assert names_of(scans) == ["a.tif", "again/x.tif", "deep/b.tif", "file.tif"]


def test_link_loops_do_not_multiply_what_a_pattern_finds(tmp_path):
    put(tmp_path, "a.tif", "deep/b.tif")
    (tmp_path / "deep" / "up").symlink_to(tmp_path)
    assert names_of(f"{tmp_path}/**/*.tif") == ["a.tif", "deep/b.tif"]


def test_a_broken_link_is_listed_as_missing(tmp_path):
    put(tmp_path, "a.tif")
    (tmp_path / "gone.tif").symlink_to(tmp_path / "nowhere.tif")
    found = entries_of(tmp_path)
    assert found["source"].to_pylist() == ["a.tif", "gone.tif"]
    assert found["stamp"].is_null().to_pylist() == [False, True]
    for pattern in ("*.tif", "**/*.tif"):
        assert names_of(f"{tmp_path}/{pattern}") == ["a.tif", "gone.tif"]


def test_the_output_inside_the_source_is_left_out(tmp_path):
    put(tmp_path, "a.tif", "table/part-00000.parquet", "table/deep/x", "table2/b.tif")
    expected = ["a.tif", "table2/b.tif"]
    table = str(tmp_path / "table")
    assert names_of(tmp_path, leave_out=table) == expected
    assert names_of(f"{tmp_path}/**/*", leave_out=table) == expected
    (tmp_path / "alias").symlink_to(tmp_path / "table")
    assert names_of(tmp_path, leave_out=str(tmp_path / "alias")) == expected
    assert names_of(f"{tmp_path}/**/*", leave_out=str(tmp_path / "alias")) == expected
    assert len(names_of(tmp_path, leave_out="memory://table")) == 4


def test_a_name_that_is_no_text_is_told_and_stops_nothing(tmp_path):
    put(tmp_path, "a.tif")
    try:  # Latin-1, as from an old archive; some file systems refuse it
        open(os.path.join(os.fsencode(tmp_path), b"caf\xe9.tif"), "wb").close()
    except OSError:
        pytest.skip("the file system takes text only")
    found = list_sources(tmp_path)
    assert found.entries["source"].to_pylist() == ["a.tif", r"caf\xe9.tif"]
    assert found.entries["stamp"].is_null().to_pylist() == [False, True]  # so it is rejected
    assert any(r"caf\xe9.tif" in remark for remark in found.remarks)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="there are no pipes by name")
def test_a_pipe_is_no_image_and_nobody_waits_for_it(tmp_path):
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    handle = os.open(pipe, os.O_RDWR)  # else a reader that does open it would wait for ever
    try:
        os.write(handle, b"not an image, but bytes")
        with pytest.raises(UnreadableImage, match="no regular file"):
            scan(str(pipe))
    finally:
        os.close(handle)


def test_a_folder_with_a_manifest_is_remarked_on(tmp_path):
    put(tmp_path, "manifest.csv", "a.tif")
    found = list_sources(tmp_path)
    assert found.entries["source"].to_pylist() == ["a.tif", "manifest.csv"]
    assert found.remarks == (
        f"{tmp_path} holds manifest.csv; give that file to use it as the manifest",
    )
    put(tmp_path, "deep/manifest.csv")
    (tmp_path / "manifest.csv").unlink()
    assert list_sources(tmp_path).remarks == ()


# Patterns and single files


@pytest.mark.parametrize(
    ("pattern", "expected"),
    [
        ("*.tif", ["a1.tif", "a2.tif", "a10.tif"]),
        ("a?.tif", ["a1.tif", "a2.tif"]),
        ("a[12].tif", ["a1.tif", "a2.tif"]),
        ("a[!1]*", ["a2.tif"]),
        ("*", ["a1.tif", "a2.tif", "a10.tif"]),  # folders are no files
        ("*/*", ["b/3.tif", "b/4.png"]),
        ("**/*.tif", ["a1.tif", "a2.tif", "a10.tif", "b/3.tif", "b/c/5.tif"]),
        ("**/[35].tif", ["b/3.tif", "b/c/5.tif"]),
        ("b/**", ["3.tif", "4.png", "c/5.tif"]),
        ("b/**/*.tif", ["3.tif", "c/5.tif"]),
        ("*/c/*.tif", ["b/c/5.tif"]),
    ],
)
def test_patterns_list_names_below_their_fixed_part(pattern, expected, tmp_path):
    put(tmp_path, "a1.tif", "a2.tif", "a10.tif", "b/3.tif", "b/4.png", "b/c/5.tif")
    found = entries_of(f"{tmp_path}/{pattern}")
    assert found["source"].to_pylist() == expected
    base = tmp_path / "b" if pattern.startswith("b/") else tmp_path
    assert found["location"].to_pylist() == [str(base / name) for name in expected]


def test_names_with_brackets_are_names_where_they_exist(tmp_path):
    put(tmp_path, "run[1]/scan[2].tif", "run[1]/scan2.tif", "run1/x.tif")
    assert names_of(tmp_path / "run[1]" / "scan[2].tif") == ["scan[2].tif"]
    assert names_of(tmp_path / "run[1]") == ["scan2.tif", "scan[2].tif"]
    assert names_of(tmp_path) == ["run1/x.tif", "run[1]/scan2.tif", "run[1]/scan[2].tif"]
    assert names_of(f"{tmp_path}/run[[]1]/*.tif") == ["run[1]/scan2.tif", "run[1]/scan[2].tif"]
    assert names_of(f"{tmp_path}/run[1]/*.tif") == ["run1/x.tif"]  # a pattern: no such folder
    put(tmp_path, "list[1].csv", content=b"path\nrun1/x.tif\n")
    assert names_of(tmp_path / "list[1].csv") == ["run1/x.tif"]


def test_one_file_is_a_source(tmp_path, monkeypatch):
    put(tmp_path, "scans/a.tif", "scans/b.tif")
    for source in (
        tmp_path / "scans" / "a.tif",
        str(tmp_path / "scans" / "a.tif"),
        f"file://{tmp_path}/scans/a.tif",
    ):
        found = entries_of(source)
        assert found["source"].to_pylist() == ["a.tif"]
        assert found["location"].to_pylist() == [str(tmp_path / "scans" / "a.tif")]
    monkeypatch.chdir(tmp_path)
    for source in ("scans", "scans/../scans", "scans/*.tif"):
        found = entries_of(source)
        assert found["source"].to_pylist() == ["a.tif", "b.tif"]
        assert found["location"].to_pylist()[0] == str(tmp_path / "scans" / "a.tif")


@pytest.mark.parametrize("source", [None, 3, b"scans", "", ["a.tif"]])
def test_a_source_is_a_path_or_a_uri(source):
    with pytest.raises(TypeError, match="source must be a path or a URI; got"):
        list_sources(source)


def test_sources_without_an_image_are_refused(tmp_path):
    (tmp_path / "empty").mkdir()
    put(tmp_path, "hidden/.a.tif")
    for source, message in (
        ("none", "none does not exist"),
        ("none.csv", "source .*none.csv does not exist"),
        ("empty", "empty has no image: nothing is listed there"),
        ("hidden", "hidden has no image: nothing is listed there"),
        ("hidden/*.tif", r"no file matches .*hidden/\*.tif"),
        ("*.png", r"no file matches .*\*.png"),
    ):
        with pytest.raises(FileNotFoundError, match=message):
            list_sources(f"{tmp_path}/{source}")
    with pytest.raises(ValueError, match="source holds a null character"):
        list_sources("a\0b")


# Other file systems


def test_folders_in_memory_are_listed_alike(memory):
    folder, put_there = memory
    for name in ("a10.tif", "a9.tif", "b/1.png", ".hidden/x.tif", "b/.y.tif", "table/part.parquet"):
        put_there(name)
    expected = ["a9.tif", "a10.tif", "b/1.png", "table/part.parquet"]
    for source in (folder, f"{folder}/"):
        found = entries_of(source)
        assert found["source"].to_pylist() == expected
        assert found["stamp"].null_count == 0  # each is where its location says
    assert names_of(folder, label_from="folder") == expected
    labels = entries_of(folder, label_from="folder")["label"].to_pylist()
    assert labels == [folder.removeprefix("memory://")] * 2 + ["b", "table"]


def test_the_output_inside_a_source_in_memory_is_left_out(memory):
    folder, put_there = memory
    for name in ("a.tif", "table/part.parquet", "table2/b.tif"):
        put_there(name)
    for source in (folder, f"{folder}/**/*"):
        assert names_of(source, leave_out=f"{folder}/table") == ["a.tif", "table2/b.tif"]


@pytest.mark.parametrize(
    ("pattern", "expected"),
    [
        ("*.tif", ["a9.tif", "a10.tif"]),
        ("a?.tif", ["a9.tif"]),
        ("**/*.tif", ["a9.tif", "a10.tif", "b/1.tif", "b/c/2.tif"]),
        ("b/**/*.tif", ["1.tif", "c/2.tif"]),
        ("*", ["a9.tif", "a10.tif"]),
    ],
)
def test_patterns_in_memory_are_the_same(pattern, expected, memory):
    folder, put_there = memory
    for name in ("a10.tif", "a9.tif", "b/1.tif", "b/c/2.tif", ".d.tif"):
        put_there(name)
    found = entries_of(f"{folder}/{pattern}")
    assert found["source"].to_pylist() == expected
    assert found["stamp"].null_count == 0


def test_single_files_in_memory(memory):
    folder, put_there = memory
    put_there("scans/a.tif")
    put_there("scans/image[1].tif")
    for name in ("a.tif", "image[1].tif"):
        found = entries_of(f"{folder}/scans/{name}")
        assert found["source"].to_pylist() == [name]
        assert found["stamp"].null_count == 0


def test_the_top_of_a_file_system_is_a_folder_too(memory):
    folder, put_there = memory
    put_there("a.tif")
    name = folder.removeprefix("memory://")
    found = entries_of("memory://")
    place = found["source"].to_pylist().index(f"{name}/a.tif")
    assert found["stamp"][place].is_valid
    files = fsspec.filesystem("memory")
    files.pipe({f"/{name}.tif": b"x", f"/{name}.csv": f"path\n{name}.tif\n".encode()})
    try:
        for source in (f"{name}.tif", f"{name[:-1]}*.tif", f"{name}.csv"):
            found = entries_of(f"memory://{source}")
            assert found["source"].to_pylist() == [f"{name}.tif"]
            assert found["stamp"].null_count == 0
    finally:
        files.rm([f"/{name}.tif", f"/{name}.csv"])


def test_manifests_in_memory_name_files_beside_them(memory, tmp_path):
    folder, put_there = memory
    for name in ("scans/a.tif", "scans/b.tif", "masks/a.png"):
        put_there(name)
    put(tmp_path, "c.tif", "d.tif")
    paths = [
        "scans/a.tif",
        f"{folder}/scans/b.tif",
        f"{tmp_path}/c.tif",
        f"file://{tmp_path}/d.tif",
    ]
    rows = "".join(f"{path},masks/a.png\n" for path in paths)
    put_there("list.csv", f"path,mask\n{rows}".encode())
    found = entries_of(f"{folder}/list.csv")
    assert found["source"].to_pylist() == paths
    assert all(None not in json.loads(stamp) for stamp in found["stamp"].to_pylist())
    table = pa.table({"path": ["scans/a.tif"], "label": [3]})
    with fsspec.open(f"{folder}/list.parquet", "wb") as stream:
        pq.write_table(table, stream)
    found = entries_of(f"{folder}/list.parquet")
    assert found["label"].to_pylist() == [3]
    assert found["stamp"].null_count == 0


def test_missing_sources_on_other_file_systems_are_named(memory):
    folder, put_there = memory
    put_there("a.tif")
    for source, kind, message in (
        (f"{folder}/none", FileNotFoundError, f"{folder}/none does not exist"),
        (f"{folder}/none.csv", FileNotFoundError, f"{folder}/none.csv does not exist"),
        (f"{folder}/*.png", FileNotFoundError, r"\*.png has no image"),
        ("nowhere://a.tif", ValueError, "nowhere://a.tif cannot be reached: .*nowhere"),
        ("nowhere://a.csv", ValueError, "nowhere://a.csv cannot be reached: .*nowhere"),
    ):
        with pytest.raises(kind, match=message):
            list_sources(source)


# Labels


def test_labels_are_names_of_folders(tmp_path):
    put(tmp_path, "scans/sound/a.tif", "scans/pinholes/deep/b.tif", "scans/c.tif")
    found = entries_of(tmp_path / "scans", label_from="folder")
    expected = {"c.tif": "scans", "pinholes/deep/b.tif": "deep", "sound/a.tif": "sound"}
    assert dict(zip(*found.select(["source", "label"]).to_pydict().values(), strict=True)) == (
        expected
    )
    for source in ("scans/sound/*.tif", "scans/*/*.tif", "scans/sound", "scans/sound/a.tif"):
        found = entries_of(f"{tmp_path}/{source}", label_from="folder")
        assert found["label"].to_pylist() == ["sound"]
    assert entries_of(tmp_path / "scans")["label"].null_count == 3  # unless asked for


def test_labels_from_folders_of_a_manifest(tmp_path):
    path = write_csv(tmp_path, "path,label\nsound/a.tif,1\n/data/pinholes/b.tif,2\n")
    assert entries_of(path, label_from="folder")["label"].to_pylist() == ["sound", "pinholes"]
    for label_from in (None, "manifest"):
        assert entries_of(path, label_from=label_from)["label"].to_pylist() == ["1", "2"]


def test_labels_that_nobody_gives_are_an_error(tmp_path):
    put(tmp_path, "a.tif")
    unlabelled = write_csv(tmp_path, "path,label\na.tif,\n")
    for source in (tmp_path / "a.tif", unlabelled):
        with pytest.raises(
            ValueError, match=r"to come from a manifest's column label; .* has none"
        ):
            list_sources(source, label_from="manifest")
        with pytest.raises(
            ValueError, match=r"column truth, an image of labels .*has 1 rows witho"
        ):
            list_sources(source, label_from="truth")
    some = write_csv(tmp_path, "path,truth,label\na.tif,t.png,x\nb.tif,,\n")
    with pytest.raises(ValueError, match=r"list.csv has 1 rows without one"):
        list_sources(some, label_from="truth")
    assert entries_of(some, label_from="manifest")["label"].to_pylist() == ["x", None]


# Stamps


def test_stamps_follow_the_image_its_mask_and_its_truth(tmp_path):
    put(tmp_path, "a.tif", "m.png", "t.png", "b.tif")
    path = write_csv(
        tmp_path, "path,mask,truth\na.tif,m.png,t.png\nb.tif,,\nc.tif,m.png,none.png\n"
    )

    def stamps():
        return entries_of(path)["stamp"].to_pylist()

    before = stamps()
    assert stamps() == before
    assert len(json.loads(before[0])) == 3
    assert json.loads(before[2]) == [None, json.loads(before[0])[1], None]
    for name in ("a.tif", "m.png", "t.png"):
        put(tmp_path, name, content=b"other")
        now = stamps()
        assert now[0] != before[0]
        assert now[1] == before[1]
        before = now
    status = os.stat(tmp_path / "b.tif")
    os.utime(tmp_path / "b.tif", ns=(status.st_atime_ns, status.st_mtime_ns + 1_000_000))
    assert stamps()[1] != before[1]  # the same size at another time


def test_a_missing_image_has_no_stamp(tmp_path):
    assert entries_of(write_csv(tmp_path, "path\nnone.tif\n"))["stamp"].to_pylist() == [None]


def test_stamps_in_memory_change_too(memory):
    folder, put_there = memory
    put_there("a.tif")
    before = entries_of(folder)["stamp"].to_pylist()
    assert entries_of(folder)["stamp"].to_pylist() == before
    put_there("a.tif", b"longer")
    assert entries_of(folder)["stamp"].to_pylist() != before


# Manifests

COLUMNS = [
    *("source", "location", "stamp", "label", "group", "mask", "mask_location", "truth_location"),
    *("row", "col", "height", "width", "pitch_x", "pitch_y", "unit"),
]

FULL = {
    "path": ["a.tif", "a.tif", "deep/b.tif"],
    "label": ["sound", "pinholes", None],
    "group": ["panel 1", "panel 1", None],
    "mask": ["m.png", None, "deep/m.png"],
    "row": [0, 64, None],
    "col": [0, 0, None],
    "height": [64, 32, None],
    "width": [64, 2, None],
    "pitch_x": [0.01, 0.01, 0.02],
    "pitch_y": [0.02, 0.02, 0.02],
    "unit": ["mm", "mm", "mm"],
    "truth": [None, "t.png", "t.png"],
    "operator": ["N.", None, "M."],
    "number": [3, None, -4],
    "gloss": [1.5, 20.0, None],
}


def write_full_csv(path):
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream)
        writer.writerow(FULL)
        rows = zip(*FULL.values(), strict=True)
        writer.writerows(["" if one is None else one for one in row] for row in rows)
    return path


def check_full(found, folder):
    entries = found.entries
    carried = ("truth", "operator", "number", "gloss", "pitch_x", "pitch_y", "unit")
    assert found.carried == carried
    assert found.remarks == ()
    assert entries.column_names == [*COLUMNS, *(f"manifest:{name}" for name in carried)]
    values = entries.to_pydict()
    assert values["source"] == FULL["path"]
    assert values["location"] == [str(folder / name) for name in FULL["path"]]
    assert json.loads(values["stamp"][2]) == [None, None, None]  # no file is there
    for name in ("label", "group", "row", "col", "height", "width", "pitch_x", "pitch_y", "unit"):
        assert values[name] == FULL[name]
    for name in ("mask", "truth"):
        expected = [one and str(folder / one) for one in FULL[name]]
        assert values[f"{name}_location"] == expected
    for name in carried:
        assert values[f"manifest:{name}"] == FULL[name]
    kinds = {field.name.removeprefix("manifest:"): field.type for field in entries.schema}
    for name in ("row", "col", "height", "width", "number"):
        assert kinds[name] == pa.int64()
    for name in ("pitch_x", "pitch_y", "gloss"):
        assert kinds[name] == pa.float64()
    for name in ("source", "label", "group", "mask_location", "truth", "operator", "unit"):
        assert kinds[name] == pa.string()


def test_all_columns_of_a_csv_manifest(tmp_path):
    check_full(list_sources(write_full_csv(tmp_path / "list.csv")), tmp_path)
    check_full(list_sources(write_full_csv(tmp_path / "LIST.CSV")), tmp_path)


def test_all_columns_of_a_parquet_manifest(tmp_path):
    path = write_parquet(tmp_path, FULL)
    check_full(list_sources(path), tmp_path)
    csv_path = write_full_csv(tmp_path / "list.csv")
    assert list_sources(path).entries.equals(list_sources(csv_path).entries)


def test_a_list_of_paths_is_enough_and_keeps_its_order(tmp_path):
    found = list_sources(write_csv(tmp_path, "path\nb.tif\na.tif\n.hidden.tif\n"))
    assert found.entries.column_names == COLUMNS
    assert found.entries["source"].to_pylist() == ["b.tif", "a.tif", ".hidden.tif"]
    assert found.carried == ()
    empty = [name for name in COLUMNS[3:] if found.entries[name].null_count == 3]
    assert empty == COLUMNS[3:]


def test_absolute_paths_and_uris_stay_as_they_are(tmp_path):
    listed = [f"{tmp_path}/x/a.tif", f"file://{tmp_path}/x/b.tif", "memory://c.tif"]
    rows = "".join(f"{name},{name},{name}\n" for name in listed)
    found = entries_of(write_csv(tmp_path, f"path,mask,truth\n{rows}"))
    for name in ("source", "location", "mask_location", "truth_location"):
        assert found[name].to_pylist() == listed


def test_paths_are_relative_to_the_manifest(tmp_path, monkeypatch):
    put(tmp_path, "scans/a.tif", "lists/list.csv", content=b"path,mask\n../scans/a.tif,m.png\n")
    monkeypatch.chdir(tmp_path / "scans")
    for source in (tmp_path / "lists" / "list.csv", "../lists/list.csv"):
        found = entries_of(source)
        assert found["source"].to_pylist() == ["../scans/a.tif"]
        assert os.path.samefile(found["location"][0].as_py(), tmp_path / "scans" / "a.tif")
        assert found["mask_location"].to_pylist() == [str(tmp_path / "lists" / "m.png")]


@pytest.mark.parametrize(
    ("fields", "kind", "expected"),
    [
        (["1", "-20", "0"], pa.int64(), [1, -20, 0]),
        (["1", "", "3"], pa.int64(), [1, None, 3]),
        (["1", "2.5", "-.5e-3"], pa.float64(), [1.0, 2.5, -0.0005]),
        (["1.", "", "+3"], pa.float64(), [1.0, None, 3.0]),
        (["007", "8", "9"], pa.string(), ["007", "8", "9"]),
        (["1", "two", ""], pa.string(), ["1", "two", None]),
        (["", "", ""], pa.string(), [None, None, None]),
        (["nan", "1", "2"], pa.string(), ["nan", "1", "2"]),
        (["True", "False", ""], pa.string(), ["True", "False", None]),
        (["1 ", "2", "3"], pa.string(), ["1 ", "2", "3"]),
        (["2025-01-31", "2025-02-01", ""], pa.string(), ["2025-01-31", "2025-02-01", None]),
        (["1_000", "0x1F", "1,5"], pa.string(), ["1_000", "0x1F", "1,5"]),
        (
            [str(10**17), str(10**18 - 1), str(1 - 10**18)],
            pa.int64(),
            [10**17, 10**18 - 1, 1 - 10**18],
        ),
    ],
)
def test_carried_columns_of_csv_become_numbers_where_all_fields_are(
    fields, kind, expected, tmp_path
):
    path = tmp_path / "list.csv"
    with path.open("w", newline="") as stream:
        csv.writer(stream).writerows([("path", "x"), *zip("abc", fields, strict=True)])
    found = entries_of(path)["manifest:x"]
    assert found.type == kind
    assert found.to_pylist() == expected


@pytest.mark.parametrize(
    "fields",
    [
        (str(2**64 + 1), str(2**64)),  # numbers of parts, beyond 64 bit
        ("1" * 19, "1" * 18 + "2"),  # beyond the digits of float64
        (str(2**53 + 1), f"{2**53}.0"),
        ("007.5", "7.5"),
        ("1e400", "2e400"),  # infinite as float64
    ],
)
def test_carried_text_that_a_number_would_lose_stays_apart(fields, tmp_path):
    found = entries_of(write_csv(tmp_path, f"path,x\na.tif,{fields[0]}\nb.tif,{fields[1]}\n"))
    one, other = found["manifest:x"].to_pylist()
    assert one != other
    assert [str(one), str(other)] == list(fields)


def test_text_columns_of_csv_stay_text(tmp_path):
    names = ("label", "group", "mask", "unit", "truth")
    path = write_csv(tmp_path, f"path,{','.join(names)}\n007,01,2,3,4,5.0\n8,1,002,3,4,5\n")
    found = entries_of(path)
    assert found["source"].to_pylist() == ["007", "8"]
    assert found["label"].to_pylist() == ["01", "1"]
    assert found["group"].to_pylist() == ["2", "002"]
    assert found["unit"].to_pylist() == ["4", "4"]
    assert found["manifest:truth"].to_pylist() == ["5.0", "5"]


def test_csv_from_office_programs_is_read(tmp_path):
    text = 'path,label,note\r\n"a, b.tif",x,"says ""no"""\r\nb.tif,,"two\r\nlines"\r\n\r\n'
    for encoding in ("utf-8", "utf-8-sig"):
        found = entries_of(write_csv(tmp_path, text, encoding))
        assert found["source"].to_pylist() == ["a, b.tif", "b.tif"]
        assert found["label"].to_pylist() == ["x", None]
        assert found["manifest:note"].to_pylist() == ['says "no"', "two\r\nlines"]
    found = entries_of(write_csv(tmp_path, "path,größe\nflächen/ä.tif,µ\n"))
    assert found["source"].to_pylist() == ["flächen/ä.tif"]
    assert found["manifest:größe"].to_pylist() == ["µ"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "list.csv cannot be read: it is empty"),
        ("\n\n", "list.csv cannot be read: it is empty"),
        ("path,label\na.tif,x\nb.tif\n", "row 2 has 1 fields, the header 2"),
        ("path,label\na.tif,x,y\n", "row 1 has 3 fields, the header 2"),
        ('path,label\n"a.tif,x\nb.tif,y\n', "list.csv cannot be read"),
        ("path,path\na.tif,b.tif\n", r"list.csv has columns of the same name: \['path'\]"),
        ("path,x,y,x,y,z\na.tif,1,2,3,4,5\n", r"same name: \['x', 'y'\]"),
        ("file,label\na.tif,x\n", r"has no column path; it has \['file', 'label'\]"),
        ("Path\na.tif\n", r"has no column path; it has \['Path'\]"),
        ("path;label\na.tif;x\n", r"has no column path; it has \['path;label'\]"),
        ("path,label\n,x\n", "list.csv: rows 1 have no path"),
        ("path,x\na.tif,1\n" + ",2\n" * 7, "rows 2, 3, 4, 5, 6, ... have no path"),
        ("path,label\na.tif,x\nb.tif,x\na.tif,y\n", "rows 1 and 3 list the same image and region, "
         "a.tif"),
    ],
)  # fmt: skip
def test_csv_that_is_no_manifest_is_refused(text, message, tmp_path):
    with pytest.raises(ValueError, match=message):
        list_sources(write_csv(tmp_path, text))


def test_an_open_quote_swallows_no_row(tmp_path):
    with pytest.raises(ValueError, match=r"list.csv cannot be read"):
        list_sources(write_csv(tmp_path, 'path,note\na.tif,"open\nb.tif,x\nc.tif,y\n'))


def test_files_that_are_no_text_or_no_parquet_are_refused(tmp_path):
    with pytest.raises(ValueError, match=r"list.csv cannot be read: .*utf-8"):
        list_sources(write_csv(tmp_path, "path\na.tif\n", "utf-16"))
    put(tmp_path, "list.parquet", content=b"path\na.tif\n")
    with pytest.raises(ValueError, match=r"list.parquet cannot be read: .*[Pp]arquet"):
        list_sources(tmp_path / "list.parquet")


@pytest.mark.parametrize(
    "header", ["path", "path,label", "path,row,col,height,width", "path,pitch_x,pitch_y,unit"]
)
def test_a_manifest_of_nothing_has_no_image(header, tmp_path):
    with pytest.raises(FileNotFoundError, match=r"list.csv has no image: nothing is listed there"):
        list_sources(write_csv(tmp_path, f"{header}\n"))


def test_one_image_under_two_spellings_is_listed_twice(tmp_path):
    for other in ("./a.tif", "deep/../a.tif", f"{tmp_path}/a.tif", f"file://{tmp_path}/a.tif"):
        with pytest.raises(ValueError, match="rows 1 and 2 list the same image and region"):
            list_sources(write_csv(tmp_path, f"path\na.tif\n{other}\n"))


def test_carried_columns_may_have_any_name_that_entries_use(tmp_path):
    path = write_csv(tmp_path, "path,source,location,stamp,mask_location\na.tif,1,2,3,4\n")
    found = list_sources(path)
    assert found.carried == ("source", "location", "stamp", "mask_location")
    assert found.entries["source"].to_pylist() == ["a.tif"]
    assert found.entries["location"].to_pylist() == [str(tmp_path / "a.tif")]
    assert found.entries["mask_location"].to_pylist() == [None]
    assert found.entries["manifest:mask_location"].to_pylist() == [4]


# Regions


def test_regions_of_one_image_differ(tmp_path):
    rows = ["a.tif,0,0,8,8", "a.tif,0,8,8,8", "a.tif,0,8,8,9", "a.tif,,,,", "b.tif,0,0,8,8"]
    text = "path,row,col,height,width\n" + "\n".join(rows) + "\n"
    found = entries_of(write_csv(tmp_path, text))
    assert found["width"].to_pylist() == [8, 8, 9, None, 8]
    for k, again in enumerate(rows):
        with pytest.raises(ValueError, match=f"rows {k + 1} and 6 list the same image and region"):
            list_sources(write_csv(tmp_path, f"{text}{again}\n"))


@pytest.mark.parametrize(
    ("header", "rows", "message"),
    [
        ("row", ["0"], r"list.csv has \['row'\] of a region; all of \['row', 'col', 'height', "),
        ("row,col,width", ["0,0,8"], r"\['row', 'col', 'width'\] of a region; all of .* needed"),
        ("row,col,height,width", ["0,0,8,8", "0,0,8,"], "row 2 has part of a region: .*'width': N"),
        ("row,col,height,width", ["-1,0,8,8"], "row 1 has a region that is no image: {'row': -1,"),
        ("row,col,height,width", [",,,", "0,-5,8,8"], "row 2 has a region.*row and col must be >="),
        ("row,col,height,width", ["0,0,1,8"], "row 1 has a region that is no.*width >= 2"),
        ("row,col,height,width", ["0,0,8,0"], "row 1 has a region that is no.*width >= 2"),
        ("row,col,height,width", ["0,0,8,8", "0,9,8.5,8"], "column height must hold integers"),
        ("row,col,height,width", ["0,0,8,8", "x,0,8,8"], "column row must hold integers"),
        ("row,col,height,width", ["0,0,8,8", "x,0,8,8"], "column row .*rows? 2"),
        ("row,col,height,width", ["0,0,8,8", "5000000000,0,8,8"], "row 2 .*5000000000"),
    ],
)
def test_regions_that_cannot_be_cut_are_refused(header, rows, message, tmp_path):
    text = f"path,{header}\n" + "".join(f"{k}.tif,{row}\n" for k, row in enumerate(rows))
    with pytest.raises(ValueError, match=message):
        list_sources(write_csv(tmp_path, text))


def test_regions_in_parquet_may_have_any_integer_type(tmp_path):
    kinds = {"row": pa.uint8(), "col": pa.int16(), "height": pa.int64(), "width": pa.uint32()}
    columns = {name: pa.array([4, None], kind) for name, kind in kinds.items()}
    found = entries_of(write_parquet(tmp_path, {"path": ["a", "b"]} | columns))
    for name in kinds:
        assert found[name].type == pa.int64()
        assert found[name].to_pylist() == [4, None]
    for kind, value in ((pa.float64(), 4.5), (pa.bool_(), True), (pa.string(), "4")):
        wrong = columns | {"col": pa.array([value, None], kind)}
        with pytest.raises(ValueError, match="column col must hold integers"):
            list_sources(write_parquet(tmp_path, {"path": ["a", "b"]} | wrong))
    # data frames turn integers with gaps into floats
    floats = {name: pa.array([4.0, float("nan")]) for name in kinds}
    found = entries_of(write_parquet(tmp_path, {"path": ["a", "b"]} | floats))
    assert found["row"].to_pylist() == [4, None]
    nulls = {name: pa.nulls(2) for name in kinds}
    found = entries_of(write_parquet(tmp_path, {"path": ["a", "b"]} | nulls))
    assert found["row"].to_pylist() == [None, None]


def test_whole_labels_that_a_data_frame_made_floats_stay_integers(tmp_path):
    columns = {"path": ["a", "b", "c"], "group": pa.array([7.0, 8.0, None])}
    for values, kind, expected in (
        ([1.0, None, 3.0], pa.int64(), [1, None, 3]),
        ([1.5, None, 3.0], pa.string(), ["1.5", None, "3"]),
    ):
        path = write_parquet(tmp_path, columns | {"label": pa.array(values)})
        found = entries_of(path)
        assert found["label"].type == kind
        assert found["label"].to_pylist() == expected
        assert found["group"].to_pylist() == ["7", "8", None]


def test_a_column_that_nearly_has_a_known_name_is_remarked_on(tmp_path):
    found = list_sources(write_csv(tmp_path, "path, Label,thick\na.tif,x,1\n"))
    assert found.carried == (" Label", "thick")
    assert len(found.remarks) == 1
    assert "column ' Label' is carried as it is; did you mean label?" in found.remarks[0]


def test_regions_beyond_64_bit_integers_are_refused(tmp_path):
    columns = {name: [8] for name in ("col", "height", "width")}
    columns["row"] = pa.array([2**63], pa.uint64())
    with pytest.raises(ValueError, match=r"list.parquet.*row"):
        list_sources(write_parquet(tmp_path, {"path": ["a"]} | columns))


# Pitch


@pytest.mark.parametrize(
    ("columns", "rows", "message"),
    [
        ("pitch_x", ["1"], "list.csv has pitch_x alone; give pitch_x and pitch_y"),
        ("pitch_y", ["1"], "list.csv has pitch_y alone; give pitch_x and pitch_y"),
        ("pitch_x,pitch_y", ["1,1", "1,0"], "column pitch_y must hold numbers > 0; rows 2 do not, "
         "the first has 0"),
        ("pitch_x,pitch_y", ["-2,1", "-3,1"], "pitch_x must hold numbers > 0; rows 1, 2 .* has -2"),
        ("pitch_x,pitch_y", ["1,1", ",1", ",1"], "pitch_x must hold numbers; rows 2, 3 have none"),
        ("pitch_x,pitch_y", ["1,1", "1,10 um"], "column pitch_y must hold numbers"),
        ("pitch_x,pitch_y", ["1,1", "1,10 um"], "pitch_y must hold numbers; rows 2"),
        ("pitch_x,pitch_y,unit", ["1,1,um", "1,1,mm"], "list.csv mixes the units mm, um; give"),
        ("pitch_x,pitch_y,unit", ["1,1,um", "1,1,"], "list.csv mixes the units .*um"),
    ],
)  # fmt: skip
def test_pitches_that_are_none_are_refused(columns, rows, message, tmp_path):
    text = f"path,{columns}\n" + "".join(f"{k}.tif,{row}\n" for k, row in enumerate(rows))
    with pytest.raises(ValueError, match=message):
        list_sources(write_csv(tmp_path, text))


def test_pitches_in_parquet_are_numbers(tmp_path):
    paths = {"path": ["a", "b"]}
    for kind in (pa.float32(), pa.float64(), pa.int32(), pa.uint8()):
        columns = {name: pa.array([2, 3], kind) for name in ("pitch_x", "pitch_y")}
        found = entries_of(write_parquet(tmp_path, paths | columns))
        for name in ("pitch_x", "manifest:pitch_x"):
            assert found[name].type == pa.float64()
            assert found[name].to_pylist() == [2.0, 3.0]
    for value, message in (
        (float("nan"), "rows 2 do not, the first has nan"),
        (float("inf"), "rows 2 do not, the first has inf"),
        (None, "must hold numbers; rows 2 have none"),
    ):
        columns = {"pitch_x": [1.0, value], "pitch_y": [1.0, 1.0]}
        with pytest.raises(ValueError, match=f"list.parquet: column pitch_x .*{message}"):
            list_sources(write_parquet(tmp_path, paths | columns))
    with pytest.raises(ValueError, match="column pitch_y must hold numbers"):
        list_sources(write_parquet(tmp_path, paths | {"pitch_x": [1, 1], "pitch_y": [True, True]}))


def test_images_may_have_pitches_of_their_own_and_units_without_pitch(tmp_path):
    path = write_csv(tmp_path, "path,pitch_x,pitch_y,unit\na.tif,1,2,um\nb.tif,3,4.5,um\n")
    found = entries_of(path)
    assert found["pitch_x"].to_pylist() == [1.0, 3.0]
    assert found["pitch_y"].to_pylist() == [2.0, 4.5]
    found = list_sources(write_csv(tmp_path, "path,unit\na.tif,um\nb.tif,mm\n"))
    assert found.carried == ("unit",)
    assert found.entries["manifest:unit"].to_pylist() == ["um", "mm"]


# Types of Parquet


@pytest.mark.parametrize(
    ("label", "kind", "expected"),
    [
        (pa.array([3, None], pa.int64()), pa.int64(), [3, None]),
        (pa.array([3, 0], pa.uint8()), pa.uint8(), [3, 0]),
        (pa.array([True, None]), pa.bool_(), [True, None]),
        (pa.array(["x", None]), pa.string(), ["x", None]),
        (pa.array(["x", "02"], pa.large_string()), pa.string(), ["x", "02"]),
        (pa.array(["x", "y"]).dictionary_encode(), pa.string(), ["x", "y"]),
        (pa.array(["x", None]).dictionary_encode(), pa.string(), ["x", None]),
        (pa.array([0.5, None]), pa.string(), ["0.5", None]),
        (pa.array([0.5, float("nan")]), pa.string(), ["0.5", None]),
        (pa.array([b"x", None]), pa.string(), ["x", None]),
    ],
)
def test_labels_of_parquet_keep_integers_and_booleans_and_become_text_otherwise(
    label, kind, expected, tmp_path
):
    found = entries_of(write_parquet(tmp_path, {"path": ["a", "b"], "label": label}))["label"]
    assert found.type == kind
    assert found.to_pylist() == expected


def test_labels_that_are_all_null_are_none(tmp_path):
    path = write_parquet(tmp_path, {"path": ["a", "b"], "label": pa.nulls(2)})
    assert entries_of(path)["label"].to_pylist() == [None, None]
    with pytest.raises(ValueError, match=r"column label; .*list.parquet has none"):
        list_sources(path, label_from="manifest")


@pytest.mark.parametrize(
    "column",
    [
        pa.array([1.5, None], pa.float32()),
        pa.array([1, None], pa.int8()),
        pa.array(["u", None]).dictionary_encode(),
        pa.array(["u", None], pa.large_string()),
        pa.array([True, None]),
        pa.array([0, None], pa.timestamp("us", "UTC")),
        pa.array([0, None], pa.date32()),
        pa.array([1, None], pa.decimal128(5, 2)),
        pa.array([[1, 2], None]),
        pa.array([{"a": 1}, None]),
        pa.array([b"\x00", None]),
    ],
    ids=lambda column: str(column.type).split("<")[0].split("[")[0],
)
def test_carried_columns_of_parquet_keep_their_types(column, tmp_path):
    path = write_parquet(tmp_path, {"path": ["a", "b"], "x": column})
    found = entries_of(path)["manifest:x"]
    assert found.type == column.type
    assert found.to_pylist() == column.to_pylist()


def test_paths_and_groups_of_parquet_become_text(tmp_path):
    paths = pa.array(["a", "b"]).dictionary_encode()
    columns = {"path": paths, "group": [7, None], "mask": pa.array(["m", None], pa.large_string())}
    found = entries_of(write_parquet(tmp_path, columns))
    assert found["source"].to_pylist() == ["a", "b"]
    assert found["group"].to_pylist() == ["7", None]
    assert found["mask_location"].to_pylist() == [str(tmp_path / "m"), None]


@pytest.mark.parametrize("name", ["path", "label", "group", "mask", "unit", "truth"])
@pytest.mark.parametrize(
    "values", [[["a"]], [{"a": 1}], [b"\xe9"]], ids=["list", "struct", "bytes"]
)
def test_columns_that_cannot_be_text_are_named(name, values, tmp_path):
    columns = {"path": ["a.tif"]} | {name: pa.array(values)}
    with pytest.raises(ValueError, match=f"list.parquet: column {name} "):
        list_sources(write_parquet(tmp_path, columns))


def test_parquet_with_columns_of_the_same_name_is_refused(tmp_path):
    table = pa.Table.from_arrays([pa.array(["a"]), pa.array(["b"])], ["path", "path"])
    with pytest.raises(ValueError, match=r"list.parquet .*path"):
        list_sources(write_parquet(tmp_path, table))
