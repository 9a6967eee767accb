"""Feature tables read back: by `read_table`, and by programs that know nothing of this package."""

import json
import pickle
import shutil
import uuid
from pathlib import Path

import fsspec
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from sklearn.base import clone
from sklearn.model_selection import GroupKFold, cross_val_score
from sklearn.neighbors import KNeighborsClassifier

from mfeat import FeatureTable, MinkowskiCurves, PatchGrid, dump, planning, read_table, schema
from mfeat.schema import OWN_COLUMNS, PartWriter, about, differences, restored, transformer_record
from mfeat.storage import LocalStorage
from mfeat.transformer import full_curves

FEW = MinkowskiCurves(**full_curves() | {"levels": 3, "smooth": (1,), "band": (), "slope": ()})
SIZE = 16


def noise(seed, shape=(40, 32)):
    return np.random.default_rng(seed).normal(size=shape).astype(np.float32)


MANIFEST = """\
path,label,group,lot,thickness,note,unit,pitch_x,pitch_y
a.npy,dull,panel 1,3,0.25,"first, of two",mm,0.5,0.25
b.npy,bright,panel 1,4,,,mm,0.5,0.25
c.npy,,,,1e-3,ünïcode,mm,0.5,0.25
"""


def write_source(folder):
    for seed, name in enumerate("abc"):
        np.save(folder / f"{name}.npy", noise(seed))
    (folder / "manifest.csv").write_text(MANIFEST, encoding="utf-8")
    return folder / "manifest.csv"


def dumped(source, out, transformer=FEW, **options):
    return dump(source, out, transformer, **{"size": SIZE, "jobs": 1} | options)


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """A table of three images in several parts; only to be read."""
    folder = tmp_path_factory.mktemp("made")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(planning, "_PART_COSTS", (1, 1))
        assert dumped(write_source(folder), folder / "out").parts == 6
    return folder / "out"


@pytest.fixture
def copied(made, tmp_path):
    return Path(shutil.copytree(made, tmp_path / "copied"))


@pytest.fixture(scope="module")
def vectors():
    """The vectors of the three images, computed without a dump."""
    transformer = MinkowskiCurves(**FEW.get_params() | {"pitch": (0.25, 0.5)})
    return np.concatenate(
        [transformer.transform(PatchGrid(SIZE).cut(noise(seed))) for seed in range(3)]
    )


# What a table holds -------------------------------------------------------------------------


def test_a_table_shows_itself_in_one_line(made):
    table = read_table(made)
    shown = f"FeatureTable({len(table)} patches, {len(table.names)} numbers, 2 labels, 2 groups, "
    assert repr(table) == f"{shown}{table.fingerprint[:12]})"
    assert "no labels" in repr(FeatureTable(**vars(table) | {"y": None}))


def test_a_table_is_what_scikit_learn_takes(made, vectors):
    table = read_table(made)
    assert isinstance(table, FeatureTable)
    assert table.X.dtype == np.float32
    assert table.X.tobytes() == vectors.tobytes()
    assert table.X.shape == (12, len(table.names))
    assert table.y.tolist() == ["dull"] * 4 + ["bright"] * 4 + [None] * 4
    # an image without a group is one of its own
    assert table.groups.tolist() == ["panel 1"] * 8 + ["c.npy"] * 4
    assert len(table) == 12


def test_the_transformer_makes_the_same_vectors_of_new_patches(made, vectors):
    table = read_table(made)
    assert table.names == list(table.transformer.get_feature_names_out())
    assert table.transformer.pitch == [0.25, 0.5]  # rows, columns
    assert table.fingerprint == table.transformer.fingerprint()
    patches = PatchGrid(SIZE).cut(noise(0))
    assert table.transformer.transform(patches).tobytes() == vectors[:4].tobytes()


def test_carried_columns_keep_their_types(made):
    columns = read_table(made).columns
    carried = ["lot", "thickness", "note", "unit", "pitch_x", "pitch_y"]
    assert columns.column_names[: len(OWN_COLUMNS)] == list(OWN_COLUMNS)
    assert sorted(columns.column_names[len(OWN_COLUMNS) :]) == sorted(carried)
    first = columns.take([0, 4, 8]).to_pydict()
    assert first["lot"] == [3, 4, None]
    assert first["thickness"] == [0.25, None, 0.001]
    assert first["note"] == ["first, of two", None, "ünïcode"]
    assert first["pitch_y"] == [0.25] * 3
    assert columns.schema.field("lot").type == pa.int64()


def test_rows_are_chosen_in_every_way(made):
    table = read_table(made)
    chosen = table.y == "bright"
    for rows in (chosen, np.flatnonzero(chosen), slice(4, 8), [4, 5, 6, 7], range(4, 8)):
        some = table[rows]
        assert isinstance(some, FeatureTable)
        assert some.X.tobytes() == table.X[4:8].tobytes()
        assert some.y.tolist() == ["bright"] * 4
        assert some.groups.tolist() == ["panel 1"] * 4
        assert some.columns.equals(table.columns.slice(4, 4).combine_chunks())
        assert (some.names, some.settings) == (table.names, table.settings)
        assert (some.fingerprint, some.transformer) == (table.fingerprint, table.transformer)
    assert table[::-1].X.tobytes() == table.X[::-1].tobytes()
    assert len(table[[]]) == len(table[0:0]) == 0
    with pytest.raises(IndexError):
        table[[12]]
    with pytest.raises(IndexError):
        table[np.ones(11, dtype=bool)]


def test_one_row_is_a_table_too(made):
    table = read_table(made)
    one = table[3]
    assert one.X.shape == (1, len(table.names))
    assert one.columns.num_rows == 1


def test_labelled_rows(made, tmp_path):
    labelled = read_table(made).labelled()
    assert labelled.y.tolist() == ["dull"] * 4 + ["bright"] * 4
    assert len(labelled) == labelled.columns.num_rows == 8
    np.save(tmp_path / "a.npy", noise(0))
    dumped(tmp_path / "a.npy", tmp_path / "out")
    table = read_table(tmp_path / "out")
    assert table.y is None
    assert table[1:].y is None
    with pytest.raises(ValueError, match="the table has no label; name a source of labels"):
        table.labelled()


def test_integer_labels_are_integers_without_missing_ones(tmp_path):
    for name in "ab":
        np.save(tmp_path / f"{name}.npy", noise(0))
    for labels, kind in (([3, 5], "i"), ([True, False], "b")):
        pq.write_table(
            pa.table({"path": ["a.npy", "b.npy"], "label": labels}), tmp_path / "m.parquet"
        )
        dumped(tmp_path / "m.parquet", tmp_path / "out", fresh=True)
        y = read_table(tmp_path / "out").y
        assert y.dtype.kind == kind
        assert y.tolist() == [labels[0]] * 4 + [labels[1]] * 4


def test_some_integer_labels_are_missing(tmp_path):
    for name in "ab":
        np.save(tmp_path / f"{name}.npy", noise(0))
    pq.write_table(
        pa.table({"path": ["a.npy", "b.npy"], "label": [3, None]}), tmp_path / "m.parquet"
    )
    dumped(tmp_path / "m.parquet", tmp_path / "out")
    table = read_table(tmp_path / "out")
    assert table.y.tolist() == [3] * 4 + [None] * 4
    labelled = table.labelled()
    assert labelled.y.tolist() == [3] * 4
    assert labelled.y.dtype.kind == "i"


def test_from_a_folder_to_scores_in_two_lines(tmp_path):
    for label, scale in (("fine", 1), ("coarse", 4)):
        (tmp_path / "in" / label).mkdir(parents=True)
        for seed in range(3):
            image = np.kron(noise(seed, (64 // scale, 64 // scale)), np.ones((scale, scale)))
            np.save(tmp_path / "in" / label / f"{seed}.npy", image)
    dumped(tmp_path / "in", tmp_path / "out", label_from="folder")
    table = read_table(tmp_path / "out")
    model, folds = KNeighborsClassifier(3), GroupKFold(3)
    scores = cross_val_score(model, table.X, table.y, groups=table.groups, cv=folds)
    assert scores.min() > 0.9  # chance is 1/2


def test_a_table_on_a_remote_storage_is_the_same(made):
    found, root = fsspec.core.url_to_fs(f"memory://{uuid.uuid4().hex}")
    for path in made.iterdir():
        found.pipe_file(f"{root}/{path.name}", path.read_bytes())
    remote, local = read_table(f"memory://{root}"), read_table(made)
    assert remote.X.tobytes() == local.X.tobytes()
    assert remote.columns.equals(local.columns)
    found.rm(root, recursive=True)


def test_a_table_can_be_pickled(made):
    table = read_table(made)
    again = pickle.loads(pickle.dumps(table))
    assert again.X.tobytes() == table.X.tobytes()
    assert again.columns.equals(table.columns)
    assert again.transformer.fingerprint() == table.fingerprint


# Several tables -----------------------------------------------------------------------------


def test_tables_of_equal_settings_are_read_as_one(made, tmp_path):
    (tmp_path / "d.npy").write_bytes((made.parent / "a.npy").read_bytes())
    rows = "path,lot,extra,unit,pitch_x,pitch_y\nd.npy,9,x,mm,0.5,0.25\n"
    (tmp_path / "m.csv").write_text(rows)
    dumped(tmp_path / "m.csv", tmp_path / "out", jobs=2)
    both = read_table([made, str(tmp_path / "out")])
    assert len(both) == 16
    assert both.X[12:].tobytes() == both.X[:4].tobytes()
    assert both.y.tolist()[8:] == [None] * 8
    assert both.groups.tolist()[12:] == ["d.npy"] * 4
    # columns that one of them lacks are empty there
    assert both.columns["extra"].to_pylist() == [None] * 12 + ["x"] * 4
    assert both.columns["lot"].to_pylist()[-5:] == [None] + [9] * 4
    assert read_table((made,)).X.tobytes() == read_table(made).X.tobytes()


@pytest.mark.parametrize(
    ("transformer", "options", "differing"),
    [
        ({"levels": 4}, {}, r"vector\.levels\.raw: \[-2\.5, 0\.0, 2\.5\] -> \[-2\.5, -0\.8"),
        ({"smooth": (2,)}, {}, r"vector\.fields: .*\n.*vector\.levels\.smooth_1: .* -> \"none\""),
        ({"dtype": "float64"}, {}, r'vector\.dtype: "float32" -> "float64"'),
        ({"min_valid": 0.25}, {}, r"vector\.min_valid: 0\.5 -> 0\.25"),
        ({}, {"channel": 0}, r'channel: "luminance" -> 0'),
        ({"pitch": (0.25, 0.5)}, {"unit": ""}, r'unit: "mm" -> null'),
        (
            {"pitch": (0.25, 0.25)},
            {"unit": ""},
            r"vector\.pitch: \[0\.25, 0\.5\] -> \[0\.25, 0\.25",
        ),
    ],
)
def test_tables_of_other_settings_are_refused_with_what_differs(
    transformer, options, differing, made, tmp_path
):
    np.save(tmp_path / "d.npy", noise(0))
    unit = "" if "unit" in options else ",unit,pitch_x,pitch_y"
    values = "" if "unit" in options else ",mm,0.5,0.25"
    (tmp_path / "m.csv").write_text(f"path{unit}\nd.npy{values}\n")
    other = MinkowskiCurves(**FEW.get_params() | transformer)
    options = {name: value for name, value in options.items() if name != "unit"}
    dumped(tmp_path / "m.csv", tmp_path / "out", other, **options)
    message = rf"of different settings cannot be combined; .*made.* -> .*out:\n  [\s\S]*{differing}"
    with pytest.raises(ValueError, match=message):
        read_table([made, tmp_path / "out"])


def test_columns_that_do_not_go_together_are_refused(made, tmp_path):
    np.save(tmp_path / "d.npy", noise(0))
    rows = "path,lot,unit,pitch_x,pitch_y\nd.npy,nine,mm,0.5,0.25\n"
    (tmp_path / "m.csv").write_text(rows)
    dumped(tmp_path / "m.csv", tmp_path / "out")
    with pytest.raises(ValueError, match=r"the other columns of .* do not go together: .*lot"):
        read_table([made, tmp_path / "out"])


@pytest.mark.parametrize(
    ("path", "error", "message"),
    [
        ([], ValueError, "path is an empty list; give one folder or more"),
        (None, TypeError, "path must be a path or a URI; got None"),
        (["a", 3], TypeError, r"path\[1\] must be a path or a URI; got 3"),
    ],
)
def test_what_cannot_be_a_table(path, error, message):
    with pytest.raises(error, match=message):
        read_table(path)


# Damaged, missing, foreign ------------------------------------------------------------------


def test_where_there_is_no_table(tmp_path):
    for place in (tmp_path, tmp_path / "nowhere"):
        with pytest.raises(FileNotFoundError, match="no complete feature table; dump writes one"):
            read_table(place)
    (tmp_path / ".unfinished").mkdir()
    with pytest.raises(FileNotFoundError, match="unfinished; run the same command again"):
        read_table(tmp_path)


def test_a_missing_part_is_named(copied):
    for k in (3, 0):  # the first is where the settings are read
        (copied / f"part-0000{k}.parquet").unlink()
        with pytest.raises(ValueError, match=rf"lacks part-0000{k}\.parquet, which its manifest"):
            read_table(copied)


def test_a_part_with_other_rows_is_named(copied):
    part = copied / "part-00002.parquet"
    table = pq.read_table(part)
    pq.write_table(table.slice(1), part)
    with pytest.raises(ValueError, match=r"part-00002\.parquet is not the part .* lists: 1 rows"):
        read_table(copied)


def test_a_part_of_other_settings_is_named(copied, tmp_path):
    np.save(tmp_path / "a.npy", noise(0, (16, 32)))
    dumped(tmp_path / "a.npy", tmp_path / "out", MinkowskiCurves(levels=4, smooth=(1,)))
    shutil.copy(tmp_path / "out" / "part-00000.parquet", copied / "part-00001.parquet")
    with pytest.raises(ValueError, match=r"part-00001\.parquet is not the part .*other settings"):
        read_table(copied)


@pytest.mark.parametrize("how", ["pixels", "footer", "truncated", "foreign", "empty"])
def test_a_damaged_part_is_named(how, copied):
    part = copied / "part-00001.parquet"
    content = bytearray(part.read_bytes())
    if how == "pixels":
        column = pq.ParquetFile(part).metadata.row_group(0).column(15)
        at = column.data_page_offset + column.total_compressed_size - 3
        content[at] ^= 0xFF
    elif how == "footer":
        content[-300:-200] = bytes(100)
    elif how == "truncated":
        content = content[:-10]
    elif how == "foreign":
        pq.write_table(pa.table({"a": [1, 2]}), part)
        content = part.read_bytes()
    else:
        content = b""
    part.write_bytes(content)
    with pytest.raises(ValueError, match=r"part-00001\.parquet"):
        read_table(copied)


def test_a_table_that_is_replaced_while_it_is_read_is_no_mixture(tmp_path, monkeypatch):
    monkeypatch.setattr(planning, "_PART_COSTS", (1, 1))
    np.save(tmp_path / "a.npy", noise(0))
    dumped(tmp_path / "a.npy", tmp_path / "out")
    opened, open_file = [], LocalStorage.open

    def replacing(store, name):
        opened.append(name)
        if opened.count("part-00001.parquet") == 1 and name == "part-00001.parquet":
            np.save(tmp_path / "a.npy", noise(1))
            dumped(tmp_path / "a.npy", tmp_path / "out", fresh=True)  # as many rows as before
        return open_file(store, name)

    with monkeypatch.context() as patch:
        patch.setattr(LocalStorage, "open", replacing)
        with pytest.raises(ValueError, match="was written anew while it was read; read it again"):
            read_table(tmp_path / "out")
    vectors = FEW.transform(PatchGrid(SIZE).cut(noise(1)))
    assert read_table(tmp_path / "out").X.tobytes() == vectors.tobytes()


def test_a_later_version_is_refused(copied, monkeypatch):
    manifest = json.loads((copied / "manifest.json").read_text())
    manifest |= {"table_version": 2, "mfeat_version": "9.1.0"}
    (copied / "manifest.json").write_text(json.dumps(manifest))
    with pytest.raises(ValueError, match=r"written by mfeat 9\.1\.0, this is .*; update mfeat"):
        read_table(copied)
    # and by a part alone, as others may keep parts without the manifest
    monkeypatch.setattr(schema, "TABLE_VERSION", 0)
    with pytest.raises(ValueError, match="update mfeat to read it"):
        about(pq.read_schema(copied / "part-00000.parquet"))


def test_a_parquet_file_of_something_else_has_nothing_to_say(tmp_path):
    with pytest.raises(ValueError, match="no feature table: its schema has no metadata"):
        about(pa.schema([("a", pa.int32())]))


# Schema -------------------------------------------------------------------------------------


def test_the_schema_says_how_the_table_was_made(made):
    found = about(pq.read_schema(made / "part-00000.parquet"))
    features = read_table(made).transformer.feature_table()
    assert found["features"] == [feature._asdict() for feature in features]
    assert found["fingerprint"] == read_table(made).fingerprint
    assert found["settings"]["unit"] == "mm"
    assert found["settings"]["vector"]["levels"]["raw"] == [-2.5, 0.0, 2.5]
    assert found["table_version"] == schema.TABLE_VERSION
    manifest = json.loads((made / "manifest.json").read_text())
    assert found["mfeat_version"] == manifest["mfeat_version"]
    assert manifest["fingerprint"] == found["fingerprint"]
    assert manifest["rows"] == 12
    assert [part["rows"] for part in manifest["parts"]] == [2] * 6


def test_all_parts_have_the_same_schema(made):
    schemas = [pq.read_schema(path) for path in sorted(made.glob("part-*.parquet"))]
    assert len(schemas) == 6
    assert all(one.equals(schemas[0], check_metadata=True) for one in schemas)
    names = schemas[0].names
    assert names[: len(OWN_COLUMNS)] == list(OWN_COLUMNS)
    assert OWN_COLUMNS[:9] == (
        *("source", "row", "col", "height", "width", "valid_fraction"),
        *("label", "label_fraction", "group"),
    )
    features = read_table(made).names
    assert names[-len(features) :] == features
    assert {schemas[0].field(name).type for name in features} == {pa.float32()}


def test_files_are_compressed_and_checked(made):
    metadata = pq.ParquetFile(made / "part-00000.parquet").metadata
    columns = [metadata.row_group(0).column(k) for k in range(metadata.num_columns)]
    assert {column.compression for column in columns} == {"ZSTD"}
    assert columns[1].statistics.min == 0  # of rows, to skip by
    assert columns[-1].statistics is None


def test_long_parts_have_row_groups_of_bounded_size(tmp_path, monkeypatch):
    monkeypatch.setattr(schema, "_ROW_GROUP_ROWS", 10)
    np.save(tmp_path / "a.npy", noise(0, (80, 80)))
    dumped(tmp_path / "a.npy", tmp_path / "out")
    metadata = pq.ParquetFile(tmp_path / "out" / "part-00000.parquet").metadata
    groups = [metadata.row_group(k).num_rows for k in range(metadata.num_row_groups)]
    assert sum(groups) == 25
    assert max(groups) == 10
    assert len(read_table(tmp_path / "out")) == 25


def test_a_writer_that_fails_lets_go_of_its_stream(made, tmp_path):
    kind = pq.read_schema(made / "part-00000.parquet")

    def write(path):
        with open(path, "wb") as stream, PartWriter(stream, kind):
            raise OSError("disk full")

    with pytest.raises(OSError, match="disk full"):
        write(tmp_path / "x")


# Restored transformers ----------------------------------------------------------------------

SETTINGS = [
    {},
    {"levels": 5, "level_range": (-1, 2)},
    {"levels": (-1.0, 0.1, 1 / 3)},
    {"levels": np.array([0.2, 0.5]), "level_rule": "rank"},
    {"levels": {"raw": 4, "smooth": [0.0, 1.0]}, "band": (), "slope": ()},
    {"level_range": {"raw": (-1, 1), "smooth": (-2, 2), "band": (-3, 3), "slope": (-1, 4)}},
    {"level_rule": "fixed", "levels": np.float32([0.1, 0.7])},
    {"functionals": ("area",), "directional": True, "location_scale": False},
    {"smooth": (np.float64(1.5), 2), "band": [1], "slope": (0,), "curvature": (1,)},
    {"pitch": (np.float64(0.1), 0.3), "scale_unit": "length", "smooth": (0.5,), "band": ()},
    {"connectivity": 4, "dtype": "float64", "remove_tilt": True},
    {"raw": False, "min_valid": 0.9, "below_min_valid": "nan", "n_jobs": 2},
    {"basis": "hermite", "terms": {"euler": np.int64(3)}, "separate_scale": np.True_},
    {"scale_rule": "matched", "smooth": (2, 3), "band": (), "slope": (3,), "contrast": [2.5]},
    {"separate_scale": True, "location_scale": "ratio", "roughness": (np.float64(0), 2)},
]


@pytest.mark.parametrize("parameters", SETTINGS)
def test_a_transformer_comes_back_with_its_fingerprint(parameters):
    transformer = MinkowskiCurves(**full_curves() | parameters)
    record = json.loads(json.dumps(transformer_record(transformer, False)))
    again = restored(record)
    assert again.settings() == transformer.settings()
    assert again.fingerprint() == transformer.fingerprint()
    patches = [noise(seed, (24, 24)) for seed in range(2)]
    assert again.transform(patches).tobytes() == transformer.transform(patches).tobytes()
    assert list(again.get_feature_names_out()) == list(transformer.get_feature_names_out())


def test_a_record_from_before_a_parameter_existed_means_what_it_meant():
    # whole curves of fixed fields were all there was: not the default of today
    record = json.loads(json.dumps(transformer_record(FEW, False)))
    for name in ("basis", "terms", "contrast", "scale_rule", "separate_scale", "roughness"):
        del record["parameters"][name]
    again = restored(record)
    assert again.fingerprint() == FEW.fingerprint()
    assert list(again.get_feature_names_out()) == list(FEW.get_feature_names_out())


@pytest.mark.parametrize("parameters", [{}, {"levels": (0.1, 0.5, 0.9)}, {"remove_tilt": True}])
def test_learned_levels_come_back_bit_for_bit(parameters):
    few = {"smooth": (1,), "band": (), "slope": (0,), "level_rule": "fitted"}
    patches = [noise(seed, (24, 24)) for seed in range(4)]
    transformer = MinkowskiCurves(**full_curves() | few | parameters).fit(patches)
    record = json.loads(json.dumps(transformer_record(transformer, False)))
    again = restored(record)
    assert again.fingerprint() == transformer.fingerprint()
    assert {k: v.tobytes() for k, v in again.levels_.items()} == {
        k: v.tobytes() for k, v in transformer.levels_.items()
    }
    assert again.transform(patches).tobytes() == transformer.transform(patches).tobytes()


def test_a_fitted_transformer_travels_in_its_table(tmp_path):
    np.save(tmp_path / "a.npy", noise(0))
    few = clone(FEW).set_params(smooth=(), level_rule="fitted")
    with pytest.raises(Exception, match="learns its levels from training"):
        dumped(tmp_path / "a.npy", tmp_path / "out", few)
    few.fit([noise(7)])
    dumped(tmp_path / "a.npy", tmp_path / "out", few)
    table = read_table(tmp_path / "out")
    patches = PatchGrid(SIZE).cut(noise(0))
    assert table.transformer.transform(patches).tobytes() == table.X.tobytes()
    assert table.fingerprint == few.fingerprint()
    # levels learned of something else are other settings
    dumped(tmp_path / "a.npy", tmp_path / "other", few.fit([noise(8)]))
    with pytest.raises(ValueError, match=r"vector\.learned_levels\.raw: "):
        read_table([tmp_path / "out", tmp_path / "other"])


def test_a_pitch_for_each_image_must_be_set_before_use(tmp_path):
    rows = ["path,pitch_x,pitch_y"]
    for k in range(2):
        np.save(tmp_path / f"{k}.npy", noise(k))
        rows.append(f"{k}.npy,{k + 1},{k + 1}")
    (tmp_path / "m.csv").write_text("\n".join(rows))
    dumped(tmp_path / "m.csv", tmp_path / "out")
    table = read_table(tmp_path / "out")
    assert table.transformer.pitch == "per image"
    patches = PatchGrid(SIZE).cut(noise(1))
    with pytest.raises((ValueError, TypeError), match="pitch must be"):
        table.transformer.transform(patches)
    vectors = table.transformer.set_params(pitch=2).transform(patches)
    assert vectors.tobytes() == table.X[4:].tobytes()
    # such tables go together, whatever the pitches in them
    assert len(read_table([tmp_path / "out", tmp_path / "out"])) == 16


# Tables without rows ------------------------------------------------------------------------


def test_a_table_without_rows(tmp_path, made):
    np.save(tmp_path / "a.npy", np.full((40, 32), np.nan))
    (tmp_path / "m.csv").write_text("path,label,lot\na.npy,dull,3\n")
    assert dumped(tmp_path / "m.csv", tmp_path / "out").patches == 0
    table = read_table(tmp_path / "out")
    assert table.X.shape == (0, len(table.names))
    assert table.X.dtype == np.float32
    assert len(table) == len(table.groups) == table.columns.num_rows == 0
    assert table.columns.schema.field("lot").type == pa.int64()
    assert table.columns.column_names[: len(OWN_COLUMNS)] == list(OWN_COLUMNS)
    assert len(table[[]]) == 0


def test_parts_and_tables_without_rows_among_others(tmp_path, monkeypatch):
    monkeypatch.setattr(planning, "_PART_COSTS", (1, 1))
    for name, image in (("a", np.full((16, 32), np.nan)), ("b", noise(0)), ("c", noise(1))):
        np.save(tmp_path / f"{name}.npy", image)
    assert dumped(tmp_path / "?.npy", tmp_path / "out").parts == 5
    table = read_table(tmp_path / "out")
    assert table.columns["source"].to_pylist() == ["b.npy"] * 4 + ["c.npy"] * 4
    dumped(tmp_path / "a.npy", tmp_path / "none")
    both = read_table([tmp_path / "none", tmp_path / "out"])
    assert both.X.tobytes() == table.X.tobytes()


# Other programs -----------------------------------------------------------------------------


def test_pandas_reads_the_parts(made):
    pandas = pytest.importorskip("pandas")
    table, columns = read_table(made), read_table(made).columns
    frame = pandas.concat(
        [pandas.read_parquet(path) for path in sorted(made.glob("part-*.parquet"))]
    )
    assert frame[table.names].to_numpy().tobytes() == table.X.tobytes()
    assert frame["source"].tolist() == columns["source"].to_pylist()
    notes = [None if pandas.isna(note) else note for note in frame["note"]]
    assert notes == columns["note"].to_pylist()
    assert frame["lot"].dropna().tolist() == [3] * 4 + [4] * 4


def test_polars_reads_the_parts(made):
    polars = pytest.importorskip("polars")
    table, columns = read_table(made), read_table(made).columns
    frame = polars.read_parquet(made / "part-*.parquet")
    assert frame.select(table.names).to_numpy().astype(np.float32).tobytes() == table.X.tobytes()
    assert frame.schema[table.names[0]] == polars.Float32
    for name in columns.column_names:
        assert frame[name].to_list() == columns[name].to_pylist()


def test_duckdb_reads_the_parts(made):
    duckdb = pytest.importorskip("duckdb")
    table, columns = read_table(made), read_table(made).columns
    with duckdb.connect() as connection:
        found = connection.read_parquet(str(made / "part-*.parquet"))
        arrays = found.order("source, row, col").fetchnumpy()
        count = connection.sql(
            f"select label, count(*) from '{made}/part-*.parquet' group by label order by label"
        ).fetchall()
    X = np.stack([np.asarray(arrays[name]) for name in table.names], axis=1)
    assert X.dtype == np.float32
    assert X.tobytes() == table.X.tobytes()
    assert arrays["source"].tolist() == columns["source"].to_pylist()
    assert count == [("bright", 4), ("dull", 4), (None, 4)]


def test_arrow_reads_the_folder_as_a_data_set(made):
    dataset = pytest.importorskip("pyarrow.dataset")
    files = sorted(str(path) for path in made.glob("part-*.parquet"))
    bright = dataset.dataset(files).to_table(filter=dataset.field("label") == "bright")
    table = read_table(made)
    chosen = table[table.y == "bright"]
    assert bright["row"].to_pylist() == chosen.columns["row"].to_pylist()
    X = np.stack([bright[name].to_numpy() for name in table.names], axis=1)
    assert X.tobytes() == chosen.X.tobytes()


# Differences --------------------------------------------------------------------------------


def test_differences_name_each_place():
    one = {"a": 1, "b": {"c": [1], "d": None}, "e": 5}
    other = {"a": 1, "b": {"c": [2], "d": None, "f": True}}
    assert differences(one, one) == []
    assert differences(one, other) == [
        "b.c: [1] -> [2]",
        'b.f: "none" -> true',
        'e: 5 -> "none"',
    ]
    long = differences({"levels": list(range(100))}, {"levels": list(range(101))})
    assert len(long) == 1
    assert len(long[0]) < 160
    assert long[0].endswith("(395 characters)")  # by hand: 10 + 2 * 90 + 3 digits, 202 between
