"""Settings of a dump: each is checked, written and read back; what a dump would do, told before."""

import inspect
import json
import sys
import tomllib

import fsspec
import numpy as np
import pyarrow.parquet as pq
import pytest
import tifffile
from sklearn.exceptions import NotFittedError

from mfeat import MinkowskiCurves, dump
from mfeat.estimate import Estimate, estimate
from mfeat.options import (
    KEYS,
    dump_settings,
    feature_value,
    read_settings,
    uniform_pitch,
    with_features,
)
from mfeat.transformer import full_curves

SMALL = full_curves() | {"levels": 3, "smooth": (), "band": (), "slope": ()}


def put(path, text, encoding="utf-8"):
    path.write_bytes(text.encode(encoding))
    return path


def parameters_of(function):
    return {
        name: parameter.default
        for name, parameter in inspect.signature(function).parameters.items()
        if parameter.kind is inspect.Parameter.KEYWORD_ONLY
    }


# Checks

UNUSABLE = [
    ({"transformer": 3}, TypeError, "transformer must be a MinkowskiCurves; got 3"),
    ({"transformer": MinkowskiCurves}, TypeError, "transformer must be a MinkowskiCurves; got <cl"),
    ({"transformer": MinkowskiCurves(levels=0)}, ValueError, "levels must be >= 1"),
    ({"transformer": MinkowskiCurves(min_valid=2)}, ValueError, "min_valid must be from 0 to 1"),
    ({"transformer": MinkowskiCurves(pitch=-1)}, ValueError, "pitch must be a finite number > 0"),
    (
        {"transformer": MinkowskiCurves(channels=("a",))},
        ValueError,
        "has channels, .* use channel=",
    ),
    (
        {"transformer": MinkowskiCurves(basis="levels", level_rule="fitted")},
        NotFittedError,
        "learns its levels from training patches: call fit",
    ),
    ({"size": 1}, ValueError, "size must be >= 2; got 1"),
    ({"size": "64"}, TypeError, "size must be an integer; got '64'"),
    ({"size": 64.0}, TypeError, "size must be an integer; got 64.0"),
    ({"size": True}, TypeError, "size must be an integer; got True"),
    ({"size": (64, 64, 3)}, ValueError, r"size must be one integer or \(rows, columns\)"),
    ({"size": None}, TypeError, "size must be an integer; got None"),
    ({"stride": 0}, ValueError, "stride must be >= 1; got 0"),
    ({"stride": (8, -8)}, ValueError, r"stride.* must be >= 1; got -8"),
    ({"edge": "pad"}, ValueError, "edge must be one of 'drop', 'shift'; got 'pad'"),
    ({"regions": "all"}, ValueError, "regions must be one of 'patch', 'grid'; got 'all'"),
    ({"label_from": "name"}, ValueError, "label_from must be one of 'manifest', 'folder', 'truth'"),
    ({"label_from": True}, ValueError, "label_from must be one of .*; got True"),
    ({"truth_rule": "most"}, ValueError, "truth_rule must be one of 'majority', 'any'; got 'most'"),
    ({"channel": "pink"}, ValueError, "channel must be one of 'luminance', 'red', 'green', 'blue'"),
    ({"channel": -1}, ValueError, "channel must be >= 0; got -1"),
    ({"channel": None}, ValueError, "channel must be one of .*; got None"),
    ({"channel": True}, ValueError, "channel must be one of .*; got True"),
    ({"missing_value": float("nan")}, ValueError, "missing_value must be a finite number; got nan"),
    ({"missing_value": float("inf")}, ValueError, "missing_value must be a finite number; got inf"),
    ({"missing_value": "-9999"}, TypeError, "missing_value must be a number; got '-9999'"),
    ({"missing_value": False}, TypeError, "missing_value must be a number; got False"),
    ({"max_pixels": 3}, ValueError, "max_pixels must be >= 4; got 3"),
    ({"max_pixels": 1e9}, TypeError, "max_pixels must be an integer; got 1000000000.0"),
]


@pytest.mark.parametrize(("given", "kind", "message"), UNUSABLE)
def test_unusable_parameters_are_refused_by_name(given, kind, message):
    with pytest.raises(kind, match=message):
        dump_settings(**given)


def test_each_parameter_is_among_those_refused():
    assert {name for given, _, _ in UNUSABLE for name in given} == {
        "transformer",
        *parameters_of(dump_settings),
    }


def test_settings_are_parameters_of_dump_with_the_same_defaults():
    own, all_of_them = parameters_of(dump_settings), parameters_of(dump)
    assert own.items() <= all_of_them.items()
    assert set(KEYS) == {*own, "jobs", "backend"}
    assert set(KEYS) <= set(all_of_them)


def test_settings_of_nothing_are_the_defaults():
    settings = dump_settings()
    expected = parameters_of(dump_settings) | {"size": [64, 64], "stride": [64, 64]}
    assert settings.keywords() == expected
    assert settings.transformer.get_params() == MinkowskiCurves().get_params()


@pytest.mark.parametrize(
    "other",
    [
        {"size": 65},
        {"size": (64, 65)},
        {"stride": 32},
        {"edge": "shift"},
        {"regions": "grid"},
        {"label_from": "folder"},
        {"truth_rule": "any"},
        {"channel": "red"},
        {"channel": 0},
        {"missing_value": 0},
        {"max_pixels": 1000},
        {"transformer": MinkowskiCurves(min_valid=0.4)},
        {"transformer": MinkowskiCurves(pitch=2)},
        {"transformer": MinkowskiCurves(levels=15)},
        {"transformer": MinkowskiCurves(remove_tilt=True)},
        {"transformer": MinkowskiCurves(dtype="float64")},
        {"transformer": MinkowskiCurves(functionals=("area",))},
    ],
    ids=str,
)
def test_settings_that_change_the_table_change_the_record(other):
    record = dump_settings().record()
    assert json.loads(json.dumps(record)) == record
    assert dump_settings(**other).record() != record


def test_settings_that_do_not_change_the_table_do_not_change_the_record():
    own = MinkowskiCurves(smooth=(1, 2, 4))
    same = MinkowskiCurves(n_jobs=2, smooth=[1.0, 2, np.float32(4)])
    record = dump_settings(same, size=(64, 64), stride=64).record()
    assert record == dump_settings(own).record()


# TOML

VARIED = [
    {},
    {"size": 32},
    {"size": (16, 48), "stride": (8, 1), "edge": "shift"},
    {"regions": "grid", "label_from": "truth", "truth_rule": "any"},
    {"channel": "green", "missing_value": -9999, "max_pixels": 10**12},
    {"channel": 3, "missing_value": 0.1, "label_from": "folder"},
    {"missing_value": -3.4028234663852886e38, "label_from": "manifest"},
    {"transformer": {"levels": {"raw": 32, "smooth": 4, "band": 5, "slope": 6}}},
    {"transformer": {"levels": [-1.5, 0, 1e-7, 0.25]}},
    {"transformer": {"levels": np.array([-1, 0, 7])}},
    {"transformer": {"levels": (0.1, 0.5), "level_rule": "rank"}},
    {"transformer": {"levels": 5, "level_rule": "rank", "level_range": (0.05, 0.95)}},
    {"transformer": {"levels": 7, "level_rule": "fixed", "level_range": (-1e-6, 2.5e17)}},
    {"transformer": {"levels": [1, 2, 40], "level_rule": "fixed"}},
    {"transformer": {"levels": range(0, 100, 10), "level_rule": "fixed"}},
    {
        "transformer": {
            "levels": {"raw": [10, 20], "slope": 4},
            "level_range": {"raw": None, "slope": (0, 3)},
            "level_rule": "fixed",
            "smooth": (),
            "band": (),
        }
    },
    {
        "transformer": {
            "levels": {"raw": 6, "smooth": [-1.0, 1.0]},
            "level_range": {"raw": None, "smooth": None},
            "band": (),
            "slope": (),
        }
    },
    {
        "transformer": {
            "levels": 4,
            "level_range": {"raw": (-1, 1), "curvature": np.array([0.5, 2.0])},
            "smooth": [],
            "band": (),
            "slope": (),
            "curvature": (0, np.float64(1.5)),
        }
    },
    {"transformer": {"raw": False, "smooth": (0.5, 16), "band": (), "slope": np.array([0, 1.25])}},
    {"transformer": {"pitch": (1e-12, 3e16), "scale_unit": "pitch", "remove_tilt": True}},
    {"transformer": {"pitch": np.float32(0.1), "scale_unit": "length", "smooth": (0.2,)}},
    {"transformer": {"functionals": ["euler"], "location_scale": False, "directional": True}},
    {"transformer": {"connectivity": 8, "contour_estimator": "pixel-edge", "dtype": "float64"}},
    {"transformer": {"connectivity": np.int64(4), "min_valid": 1, "below_min_valid": "nan"}},
    {"transformer": {"raw": np.True_, "min_valid": 0.0}},
    {"transformer": {"contrast": (2, np.float32(2.5)), "separate_scale": np.True_}},
    {"transformer": {"separate_scale": True, "location_scale": "ratio", "roughness": [0, 2]}},
    {"transformer": {"scale_rule": "matched", "smooth": [2.5], "band": (), "slope": (3,)}},
    {"transformer": {"basis": "hermite", "terms": {"area": 3, "euler": np.int64(2)}}},
    {"transformer": {"basis": "hermite", "terms": 5, "functionals": ("anisotropy",)}},
    {
        "transformer": {
            "basis": "hermite",
            "levels": {"raw": 6, "smooth": [-1.0, 1.0]},
            "level_range": {"raw": None, "smooth": None},
            "band": (),
            "slope": (),
        }
    },
]


@pytest.mark.parametrize("given", VARIED, ids=str)
def test_what_is_printed_reads_back_as_the_same_settings(given, tmp_path):
    given = dict(given)
    if "transformer" in given:
        given["transformer"] = MinkowskiCurves(**full_curves() | given["transformer"])
    settings = dump_settings(**given)
    text = settings.toml()
    again = dump_settings(**read_settings(put(tmp_path / "dump.toml", text)))
    assert again.record() == settings.record()
    assert again.keywords() == settings.keywords()
    assert again.transformer.fingerprint() == settings.transformer.fingerprint()
    for name in ("n_jobs", "min_valid", "below_min_valid"):
        assert getattr(again.transformer, name) == getattr(settings.transformer, name)
    assert again.toml() == text


def test_what_is_printed_names_every_setting():
    settings = dump_settings(
        MinkowskiCurves(n_jobs=2), stride=16, label_from="folder", missing_value=0
    )
    found = tomllib.loads(settings.toml())
    features = found.pop("features")
    assert set(found) == set(KEYS) - {"jobs", "backend"}  # how to run is not what to compute
    parameters = MinkowskiCurves().get_params()
    assert set(features) == {name for name, value in parameters.items() if value is not None}
    assert "stride" not in dump_settings(size=32).toml()  # it follows the size


def test_a_flag_for_the_size_takes_the_printed_stride_along(tmp_path):
    printed = put(tmp_path / "dump.toml", dump_settings(size=32).toml())
    found = dump_settings(**(read_settings(printed) | {"size": 128}))
    assert found.grid.stride == (128, 128)


def test_every_key_is_read(tmp_path):
    values = {
        "size": [32, 48], "stride": 16, "edge": "shift", "regions": "grid", "label_from": "folder",
        "truth_rule": "any", "channel": 2, "missing_value": -1.5, "max_pixels": 10_000, "jobs": 2,
        "backend": "loky",
    }  # fmt: skip
    assert set(values) == set(KEYS)
    text = "".join(f"{name} = {json.dumps(value)}\n" for name, value in values.items())
    assert read_settings(put(tmp_path / "dump.toml", text)) == values
    for name, value in values.items():
        path = put(tmp_path / "one.toml", f"{name} = {json.dumps(value)}")
        assert read_settings(path) == {name: value}


def test_features_of_a_file_are_parameters_of_the_transformer(tmp_path):
    text = "[features]\nlevels = {raw = 4, slope = [1, 2.5]}\nsmooth = []\nband = []\n"
    found = read_settings(put(tmp_path / "dump.toml", text))
    assert list(found) == ["transformer"]
    expected = MinkowskiCurves().get_params() | {
        "levels": {"raw": 4, "slope": [1, 2.5]},
        "smooth": [],
        "band": [],
    }
    assert found["transformer"].get_params() == expected
    text = "[features.levels]\nraw = 4\nslope = [1, 2.5]\n[features]\nsmooth = []\nband = []\n"
    assert read_settings(put(tmp_path / "b.toml", "")) == {}
    other = "features.levels.raw = 4\nfeatures.levels.slope = [1, 2.5]\nfeatures.smooth = []\n"
    found = read_settings(put(tmp_path / "c.toml", f"{other}features.band = []\n"))
    assert found["transformer"].get_params() == expected


def test_settings_are_read_as_editors_write_them(tmp_path):
    text = "# of the line in hall 2\r\nsize = 32\r\n[features]\r\nlevels = 8 # few\r\n"
    for encoding in ("utf-8", "utf-8-sig"):  # some editors begin a file with a mark
        found = read_settings(put(tmp_path / "dump.toml", text, encoding))
        assert found["size"] == 32
        assert found["transformer"].levels == 8


def test_settings_are_read_from_other_file_systems():
    with fsspec.open("memory://settings/dump.toml", "wb") as stream:
        stream.write(b"size = 32\n")
    assert read_settings("memory://settings/dump.toml") == {"size": 32}


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("size 32", r"settings .*dump.toml are not TOML: .*line 1"),
        ("size = 32\nsize = 16", r"settings .*dump.toml are not TOML: Cannot overwrite a value"),
        ("siez = 32\nlevels = 3", r"unknown keys \['siez', 'levels'\]; known are size, stride, .*"),
        ("cluster = 'tcp://a:1'", r"unknown keys \['cluster'\]; .* and the table \[features\]"),
        ("transformer = 'x'", r"unknown keys \['transformer'\]"),
        ("[feature]\nlevels = 3", r"unknown keys \['feature'\]"),
        ("features = 3", r"dump.toml: features must be a table of parameters; got 3"),
        ("[[features]]\nlevels = 3", r"dump.toml: features must be a table of parameters; got \["),
        (
            "[features]\nlevel = 3",
            r"dump.toml: MinkowskiCurves has no parameter \['level'\]; it has",
        ),
    ],
)
def test_settings_that_cannot_be_read_are_refused(text, message, tmp_path):
    with pytest.raises(ValueError, match=message):
        read_settings(put(tmp_path / "dump.toml", text))


def test_files_that_hold_no_settings_are_refused(tmp_path):
    with pytest.raises(ValueError, match=r"settings .*dump.toml are not TOML: .*utf-8"):
        read_settings(put(tmp_path / "dump.toml", "size = 32", "utf-16"))
    with pytest.raises(FileNotFoundError, match=r"none.toml"):
        read_settings(tmp_path / "none.toml")
    for wrong in (None, 3, ""):
        with pytest.raises(TypeError, match="settings must be a path or a URI; got"):
            read_settings(wrong)


# Parameters by name


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("levels=32", ("levels", 32)),
        (" levels = 32 ", ("levels", 32)),
        ("pitch=1e-2", ("pitch", 0.01)),
        ("pitch=[0.01, 0.02]", ("pitch", [0.01, 0.02])),
        ("smooth=[]", ("smooth", [])),
        ("smooth=[1, 2.5]", ("smooth", [1, 2.5])),
        ("raw=false", ("raw", False)),
        ("connectivity=mean", ("connectivity", "mean")),
        ('level_rule="rank"', ("level_rule", "rank")),
        ("level_rule='rank'", ("level_rule", "rank")),
        ("contour_estimator=crofton-4", ("contour_estimator", "crofton-4")),
        ("levels={raw = 4, slope = [1, 2]}", ("levels", {"raw": 4, "slope": [1, 2]})),
        ("smooth=(1, 2)", ("smooth", [1, 2])),
        ("band=()", ("band", [])),
        ("raw=False", ("raw", False)),
        ("smooth=(1, 2", ("smooth", "(1, 2")),  # the transformer will say what is wrong
        ("levels=a=b", ("levels", "a=b")),
        ("below_min_valid=nan", ("below_min_valid", "nan")),  # no parameter may be NaN
    ],
)
def test_a_parameter_by_name_has_a_value_in_toml_or_bare_text(text, expected):
    found = feature_value(text)
    assert found == expected
    assert type(found[1]) is type(expected[1])


@pytest.mark.parametrize("text", ["levels", "", "=3", "  =3"])
def test_text_that_gives_no_parameter_is_refused(text):
    with pytest.raises(ValueError, match=r"is not NAME=VALUE, e.g. levels=32"):
        feature_value(text)


def test_a_value_of_several_lines_sets_nothing_else():
    name, value = feature_value("levels=3\nraw=false")
    assert (name, value) == ("levels", "3\nraw=false")  # as a whole, so that it is refused
    with pytest.raises(TypeError, match="levels must be a sequence of numbers"):
        dump_settings(with_features(MinkowskiCurves(), {name: value}, "--set"))


def test_parameters_by_name_leave_the_others_and_the_original():
    base = MinkowskiCurves(levels=8, pitch=0.5)
    found = with_features(base, {"levels": 4, "smooth": [1]}, "--set")
    assert found.get_params() == base.get_params() | {"levels": 4, "smooth": [1]}
    assert base.levels == 8
    with pytest.raises(
        ValueError, match=r"--set: MinkowskiCurves has no parameter \['level'\]; it "
    ):
        with_features(base, {"level": 4}, "--set")
    with pytest.raises(
        ValueError, match=r"here: features must be a table of parameters; got \[4\]"
    ):
        with_features(base, [4], "here")


# Pitch


def test_pitches_of_a_manifest_take_the_place_of_none():
    settings = dump_settings()
    assert uniform_pitch(settings, np.array([[2.0, 3.0]] * 4)) == (2.0, 3.0)
    assert uniform_pitch(settings, np.array([[2.0, 3.0], [2.0, 2.0]])) is None
    own = dump_settings(MinkowskiCurves(pitch=(2, 3)))
    assert uniform_pitch(own, np.array([[2.0, 3.0]] * 4)) == (2.0, 3.0)


def test_pitches_that_contradict_are_refused():
    own = dump_settings(MinkowskiCurves(pitch=(2, 3)))
    for pitch in ([[3.0, 2.0]] * 2, [[2.0, 3.0], [2.0, 4.0]]):
        with pytest.raises(ValueError, match=r"transformer has pitch \(2.0, 3.0\).*leave one of"):
            uniform_pitch(own, np.array(pitch))
    noise = np.random.default_rng(0).normal(size=(4, 16, 16))
    fitted = MinkowskiCurves(**SMALL | {"level_rule": "fitted"}).fit(noise)
    with pytest.raises(ValueError, match="images of different pitch cannot share learned levels"):
        uniform_pitch(dump_settings(fitted), np.array([[2.0, 3.0], [2.0, 4.0]]))


# Estimates


@pytest.fixture
def mixed(tmp_path):
    """A folder of usable images of several kinds and others."""
    folder = tmp_path / "scans"
    folder.mkdir()
    random = np.random.default_rng(5)
    np.save(folder / "a.npy", random.normal(size=(96, 160)).astype(np.float32))
    np.save(folder / "b.npy", random.integers(0, 255, (64, 64), dtype=np.uint8))
    tifffile.imwrite(folder / "c.tif", random.normal(size=(128, 64)), compression="zlib")
    np.save(folder / "small.npy", np.zeros((20, 90)))
    np.save(folder / "line.npy", np.zeros((1, 90)))
    (folder / "notes.txt").write_text("hello")
    (folder / "more.txt").write_text("hello")
    return folder


def everything_in(folder):
    return {path: path.stat().st_mtime_ns for path in [folder, *folder.rglob("*")]}


def test_an_estimate_tells_the_numbers_of_the_dump(mixed, tmp_path):
    settings = dump_settings(MinkowskiCurves(**SMALL), size=32)
    found = estimate(mixed, settings, jobs=1)
    assert found.patches == 3 * 5 + 2 * 2 + 4 * 2  # by hand, from the sizes of the images
    assert found.images == 3
    assert found.features == 2 + 3 * 3  # mean and deviation; three functionals at three levels
    assert found.workers == 1
    assert sorted(found.rejects.values()) == [1, 1, 2]  # too small, one line, twice no image
    assert any("not an image" in reason for reason in found.rejects)
    assert found.seconds > 0.0
    summary = dump(mixed, tmp_path / "table", settings.transformer, size=32, jobs=1)
    assert found.patches == summary.patches
    assert found.parts == summary.parts
    assert found.features == summary.features
    assert sum(found.rejects.values()) == summary.rejected_images
    part = pq.read_schema(tmp_path / "table" / "part-00000.parquet")
    assert found.columns == part.names


def test_an_estimate_writes_nothing(mixed, tmp_path):
    before = everything_in(tmp_path)
    settings = dump_settings(MinkowskiCurves(**SMALL), size=32)
    for out in ("", tmp_path / "new" / "table", mixed / "table"):
        estimate(mixed, settings, out=out, jobs=1)
    assert everything_in(tmp_path) == before
    estimate(mixed, settings, out="memory://estimated/table", jobs=1)
    assert not fsspec.filesystem("memory").exists("/estimated")


def test_an_estimate_leaves_the_output_out(mixed):
    settings = dump_settings(MinkowskiCurves(**SMALL), size=32)
    before = estimate(mixed, settings, jobs=1)
    dump(mixed, mixed / "table", settings.transformer, size=32, jobs=1)
    after = estimate(mixed, settings, out=mixed / "table", jobs=1)
    assert (after.patches, after.rejects) == (before.patches, before.rejects)
    assert estimate(mixed, settings, jobs=1).rejects != before.rejects


def test_an_image_that_is_shared_out_counts_once(tmp_path):
    image = np.lib.format.open_memmap(tmp_path / "large.npy", "w+", np.uint8, (4096, 4096))
    image[::2] = 1
    del image
    settings = dump_settings(MinkowskiCurves(**SMALL), size=128)
    found = estimate(tmp_path, settings, jobs=1)
    assert found.parts > 1
    assert found.patches == 32 * 32
    assert found.images == 1


def test_an_estimate_counts_regions(tmp_path):
    np.save(tmp_path / "a.npy", np.random.default_rng(0).normal(size=(100, 100)))
    manifest = put(
        tmp_path / "list.csv",
        "path,row,col,height,width\na.npy,0,0,50,60\na.npy,50,0,50,40\na.npy,60,60,50,50\n",
    )
    transformer = MinkowskiCurves(**SMALL)
    found = estimate(manifest, dump_settings(transformer, size=20), jobs=1)
    assert (found.images, found.patches) == (2, 2)
    found = estimate(manifest, dump_settings(transformer, size=20, regions="grid"), jobs=1)
    assert (found.images, found.patches) == (2, 2 * 3 + 2 * 2)
    assert list(found.rejects.values()) == [1]
    assert "reaches outside the image of 100x100" in next(iter(found.rejects))


def directory(path, count, size, note=""):
    random = np.random.default_rng(11)
    rows = []
    for k in range(count):
        np.save(path / f"{k}.npy", random.normal(size=size).astype(np.float32))
        text = "".join(random.choice(list("abcdefghijklmnop"), 120)) if note else ""
        rows.append(f"{k}.npy,{text}\n")
    return put(path / "list.csv", f"path,note\n{''.join(rows)}")


@pytest.mark.parametrize(
    ("parameters", "size", "count", "shape", "note"),
    [
        (SMALL, 32, 3, (256, 256), ""),
        ({"levels": 8}, 64, 2, (512, 256), ""),
        ({"levels": 8, "dtype": "float64", "smooth": ()}, 64, 2, (256, 256), ""),
        (SMALL | {"levels": 40, "level_rule": "rank", "directional": True}, 32, 4, (128, 128), ""),
        (SMALL, 32, 200, (32, 32), ""),
        (SMALL, 32, 200, (32, 32), "note"),
        ({"levels": 8}, 32, 100, (32, 32), "note"),
        (SMALL, 16, 1, (1024, 1024), ""),
    ],
)
def test_the_size_is_estimated_within_a_factor_of_two(
    parameters, size, count, shape, note, tmp_path
):
    manifest = directory(tmp_path, count, shape, note)
    transformer = MinkowskiCurves(**parameters)
    found = estimate(manifest, dump_settings(transformer, size=size), jobs=1)
    dump(manifest, tmp_path / "table", transformer, size=size, jobs=1)
    parts = (tmp_path / "table").glob("part-*.parquet")
    real = sum(part.stat().st_size for part in parts)
    assert 0.5 < found.size_bytes / real < 2.0


def test_an_estimate_of_nothing_usable_is_nothing(tmp_path):
    (tmp_path / "notes.txt").write_text("hello")
    found = estimate(tmp_path, dump_settings(), jobs=1)
    assert (found.images, found.patches, found.size_bytes, found.seconds) == (0, 0, 0.0, 0.0)
    assert list(found.rejects.values()) == [1]


def test_an_estimate_without_a_usable_sample_knows_no_size(tmp_path):
    np.save(tmp_path / "a.npy", np.full((64, 64), np.nan))
    found = estimate(tmp_path, dump_settings(), jobs=1)
    assert found.patches == 1
    assert np.isnan([found.size_bytes, found.seconds]).all()
    assert "about unknown size and unknown time" in str(found)


def test_an_estimate_takes_the_pitch_of_the_manifest(tmp_path):
    np.save(tmp_path / "a.npy", np.random.default_rng(0).normal(size=(64, 64)))
    np.save(tmp_path / "b.npy", np.random.default_rng(1).normal(size=(64, 64)))
    text = "path,pitch_x,pitch_y,unit\na.npy,0.01,0.02,mm\nb.npy,0.01,0.02,mm\n"
    manifest = put(tmp_path / "list.csv", text)
    found = estimate(manifest, dump_settings(MinkowskiCurves(**SMALL)), jobs=1)
    assert found.settings.transformer.pitch == (0.02, 0.01)
    assert tomllib.loads(found.settings.toml())["features"]["pitch"] == [0.02, 0.01]
    assert found.columns[10:13] == ["pitch_x", "pitch_y", "unit"]
    put(manifest, text.replace("b.npy,0.01", "b.npy,0.03"))
    found = estimate(manifest, dump_settings(MinkowskiCurves(**SMALL)), jobs=1)
    assert found.settings.transformer.pitch == 1.0  # of each image its own
    assert found.patches == 2


def test_an_estimate_is_for_so_many_workers(mixed):
    settings = dump_settings(MinkowskiCurves(**SMALL), size=32)
    assert estimate(mixed, settings, jobs=2, backend="threading").workers == 2
    with pytest.raises(ValueError, match="jobs must be >= 1, or <= -1"):
        estimate(mixed, settings, jobs=0)
    with pytest.raises(ValueError, match="backend must be one of 'threading', 'loky'; got 'mpi'"):
        estimate(mixed, settings, backend="mpi")
    with pytest.raises(ValueError, match="backend 'loky' and a cluster were given; choose one"):
        estimate(mixed, settings, backend="loky", cluster="tcp://127.0.0.1:1")


def test_an_estimate_refuses_what_the_dump_refuses(mixed, tmp_path):
    for settings, kind, message in (
        (dump_settings(label_from="truth"), ValueError, "column truth, an image of labels"),
        (dump_settings(MinkowskiCurves(**full_curves()), size=3), ValueError, "smooth_4: .*widest"),
    ):
        for act in (
            lambda given=settings: estimate(mixed, given, jobs=1),
            lambda given=settings: dump(
                mixed, tmp_path / "t", given.transformer, jobs=1, **given.keywords()
            ),
        ):
            with pytest.raises(kind, match=message):
                act()
    with pytest.raises(FileNotFoundError, match="none does not exist"):
        estimate(tmp_path / "none", dump_settings())
    manifest = put(tmp_path / "list.csv", "path,raw_mean,page\na.npy,1,2\n")
    with pytest.raises(ValueError, match=r"columns \['raw_mean', 'page'\] have names that the tab"):
        estimate(manifest, dump_settings(MinkowskiCurves(**SMALL)), jobs=1)


@pytest.mark.parametrize(
    ("size", "seconds", "expected"),
    [
        (0.0, 0.0, "about 0 B and 0 s"),
        (999.0, 89.4, "about 999 B and 89 s"),
        (12_345.0, 90.0, "about 12.3 kB and 2 min"),
        (5e6, 5000.0, "about 5 MB and 83 min"),
        (2.5e9, 5400.0, "about 2.5 GB and 1.5 h"),
        (7e15, 1e6, "about 7e+03 TB and 277.8 h"),
        (float("nan"), float("nan"), "about unknown size and unknown time"),
    ],
)
def test_estimates_are_told_in_words(size, seconds, expected):
    columns = ["source", "row", "raw_area_00", "raw_area_01"]
    rejects = {"empty file": 2, "too large": 1}
    found = Estimate(7, 30, 2, columns, 2, rejects, size, seconds, 4, dump_settings())
    lines = str(found).splitlines()
    assert lines[0] == "7 images with 30 patches in 2 parts"
    assert lines[1] == "4 columns: source, row; 2 numbers, raw_area_00 to raw_area_01"
    assert lines[2] == f"{expected} with 4 workers, from a sample"
    assert lines[3:] == [
        "3 files to be rejected by their headers:",
        "  2 x empty file",
        "  1 x too large",
    ]


def test_estimates_show_no_progress_where_nobody_looks(mixed, capsys):
    estimate(mixed, dump_settings(MinkowskiCurves(**SMALL), size=32), jobs=1)
    assert capsys.readouterr() == ("", "")
    assert not sys.stderr.isatty()
