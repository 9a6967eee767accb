"""Who takes part: names, import paths, transformers; classifiers; the variants of an ablation."""

import sys
import textwrap
import uuid

import numpy as np
import pytest
from sklearn.base import BaseEstimator, TransformerMixin
from sklearn.decomposition import PCA
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.neighbors import KNeighborsClassifier
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import FunctionTransformer
from sklearn.svm import SVC

from mfeat import MinkowskiCurves
from mfeat.candidates import (
    CLASSIFIERS,
    OWN,
    candidates_of,
    classifiers_of,
    learns,
    prepared,
)
from mfeat.descriptors import DESCRIPTORS, GreyHistogram, LocalBinaryPatterns
from mfeat.transformer import full_curves
from mfeat.variants import variants_of

MINE = MinkowskiCurves(terms=2)

CODE = """
from sklearn.base import BaseEstimator, TransformerMixin

class Mean(TransformerMixin, BaseEstimator):
    def __init__(self, power=1):
        self.power = power

    def fit(self, X, y=None):
        return self

    def transform(self, X):
        return (X**self.power).mean(axis=(1, 2))[:, None]

class Needy(Mean):
    def __init__(self, power):
        self.power = power

def squares():
    return Mean(power=2)

cubes = Mean(power=3)
number = 3
def text():
    return "no transformer"
"""


@pytest.fixture
def module(tmp_path, monkeypatch):
    """Return a function that writes a module where it can be imported, and gives its name."""
    monkeypatch.syspath_prepend(tmp_path)
    made = []

    def write(code=CODE):
        made.append(f"own_{uuid.uuid4().hex}")
        (tmp_path / f"{made[-1]}.py").write_text(textwrap.dedent(code))
        return made[-1]

    yield write
    for name in made:
        sys.modules.pop(name, None)


class Plain:
    """A transformer that inherits nothing."""

    def fit(self, X, y=None):
        return self

    def transform(self, X):
        return np.zeros((len(X), 1))

    def get_params(self, deep=True):
        return {}

    def set_params(self, **_):
        return self


class Stateless(TransformerMixin, BaseEstimator):
    def __init__(self, n_jobs=None):
        self.n_jobs = n_jobs

    def fit(self, X, y=None):
        return self

    def transform(self, X):
        return np.zeros((len(X), 1))

    def __sklearn_tags__(self):
        tags = super().__sklearn_tags__()
        tags.requires_fit = False
        return tags


# Candidates ---------------------------------------------------------------------------------


def test_by_default_ours_and_all_known_ones():
    found = candidates_of(None, MINE)
    assert list(found) == [OWN, *DESCRIPTORS]
    assert found[OWN] is MINE
    assert {name: type(one) for name, one in found.items() if name != OWN} == DESCRIPTORS


def test_names_in_the_order_given():
    found = candidates_of(["gabor", OWN, "grey-histogram"], MINE)
    assert list(found) == ["gabor", OWN, "grey-histogram"]
    assert found[OWN] is MINE
    assert isinstance(found["grey-histogram"], GreyHistogram)
    assert list(candidates_of(("gabor",), MINE)) == ["gabor"]


def test_transformers_by_name():
    given = {"mine": MINE, "pca": make_pipeline(FunctionTransformer(), PCA(2)), "plain": Plain()}
    found = candidates_of(given, MINE)
    assert found == given
    assert found is not given
    assert list(found) == list(given)


@pytest.mark.parametrize(("attribute", "power"), [("Mean", 1), ("squares", 2), ("cubes", 3)])
def test_import_paths_of_a_class_a_function_and_an_instance(module, attribute, power):
    name = f"{module()}:{attribute}"
    found = candidates_of([name], MINE)
    assert list(found) == [name]
    assert found[name].get_params() == {"power": power}
    patches = np.full((2, 4, 4), 2.0)
    assert found[name].fit(patches).transform(patches).tolist() == [[2.0**power]] * 2


def test_import_paths_of_packages():
    found = candidates_of(["sklearn.decomposition:PCA"], MINE)
    assert isinstance(found["sklearn.decomposition:PCA"], PCA)


@pytest.mark.parametrize(
    ("attribute", "error", "text"),
    [
        ("absent", ValueError, r"module 'own_\w+' has no attribute 'absent'"),
        ("number", TypeError, "is 3, no transformer"),
        ("text", TypeError, "must be a scikit-learn transformer; 'no transformer' has no fit, "),
        ("Needy", TypeError, r"cannot be made without arguments \(.*power.*\); give a function"),
    ],
)
def test_import_paths_that_lead_to_no_transformer(module, attribute, error, text):
    with pytest.raises(error, match=text):
        candidates_of([f"{module()}:{attribute}"], MINE)


def test_modules_that_cannot_be_imported(module):
    with pytest.raises(ImportError, match=r"module 'absent_module' cannot be imported \(No module"):
        candidates_of(["absent_module:thing"], MINE)
    name = module("import absent_module\n")
    with pytest.raises(ImportError, match=f"module '{name}' cannot be imported .*absent_module"):
        candidates_of([f"{name}:thing"], MINE)


def test_an_error_inside_a_module_is_not_taken_for_a_missing_attribute(module):
    name = module("import math\nmath.no_such_function\nclass Mean: ...\n")
    with pytest.raises(AttributeError, match="no_such_function"):
        candidates_of([f"{name}:Mean"], MINE)


@pytest.mark.parametrize("name", ["wavelet", "Gabor", "", ":x", ".relative:x", "os:", "os.path"])
def test_an_unknown_name_lists_the_known_ones(name):
    with pytest.raises(ValueError) as caught:
        candidates_of([name], MINE)
    text = str(caught.value)
    assert f"there is no descriptor {name!r}; known are minkowski, " in text
    assert all(known in text for known in DESCRIPTORS)
    assert "import path such as package.module:MyTransformer" in text


@pytest.mark.parametrize(
    ("given", "error", "text"),
    [
        (["gabor", OWN, "gabor"], ValueError, "descriptors holds a name twice: .*gabor"),
        ([], ValueError, "descriptors is empty; known are minkowski, "),
        ({}, ValueError, "descriptors is empty"),
        ("gabor", TypeError, "must be a list of names or a dict of transformers; got 'gabor'"),
        (7, TypeError, "must be a list of names or a dict of transformers; got 7"),
        ({"gabor"}, TypeError, "must be a list of names or a dict"),
        ([MINE], TypeError, r"a list of descriptors holds names; got Mink.*in a dict by name"),
        ({3: MINE}, TypeError, "names of descriptors must be text; got 3"),
        ({"": MINE}, TypeError, "names of descriptors must be text; got ''"),
        ({"minkowski: 8 levels": MINE}, ValueError, "is a name that variants of an ablation have"),
        ({"x": GreyHistogram}, TypeError, "'x' must be a scikit-learn transformer; .* no instance"),
        ({"x": SVC()}, TypeError, "'x' must be a scikit-learn transformer; .* has no transform"),
        ({"x": None}, TypeError, "'x' must be .* has no fit, transform, get_params"),
    ],
)
def test_candidates_that_cannot_be(given, error, text):
    with pytest.raises(error, match=text):
        candidates_of(given, MINE)


# Learning, and missing pixels ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("transformer", "expected"),
    [
        (MinkowskiCurves(), False),
        (MinkowskiCurves(basis="levels", level_rule="fitted"), True),
        (GreyHistogram(), False),
        (GreyHistogram(scaling="range"), True),
        (PCA(2), True),
        (FunctionTransformer(), False),
        (make_pipeline(Stateless(), PCA(2)), True),
        (Stateless(), False),
        (Plain(), True),  # it does not say otherwise
    ],
    ids=lambda value: type(value).__name__,
)
def test_who_must_be_fitted_anew(transformer, expected):
    assert learns(transformer) is expected


@pytest.mark.parametrize("missing", [False, True])
@pytest.mark.parametrize("name", [OWN, *DESCRIPTORS])
def test_known_ones_are_prepared_for_missing_pixels(name, missing):
    original = candidates_of(None, MinkowskiCurves(n_jobs=2))[name].set_params(n_jobs=2)
    before = dict(original.get_params())
    copy = prepared(original, missing)
    assert copy is not original
    assert original.get_params() == before
    assert type(copy) is type(original)
    expected = before | {"n_jobs": 1}
    if name == OWN:
        expected["below_min_valid"] = "nan"
    elif missing:
        expected["missing"] = "nearest"
    assert copy.get_params() == expected
    if missing:
        patches = np.random.default_rng(0).normal(size=(2, 48, 48))
        patches[:, 5:9, 10:20] = np.nan
        assert np.isfinite(copy.fit_transform(patches)).all()


def test_others_are_copied_only():
    original = make_pipeline(Stateless(n_jobs=3), PCA(2))
    copy = prepared(original, True)
    assert copy is not original
    assert copy[0] is not original[0]
    assert copy.get_params()["stateless__n_jobs"] == 3
    assert prepared(Stateless(n_jobs=3), True).n_jobs == 1
    fitted = PCA(2).fit(np.eye(4))
    assert not hasattr(prepared(fitted, False), "components_")


def test_a_setting_for_missing_pixels_stays():
    assert prepared(LocalBinaryPatterns(missing="nearest"), False).missing == "nearest"


# Classifiers --------------------------------------------------------------------------------


def test_classifiers_by_name():
    found = classifiers_of(["svm", "lda"])
    assert list(found) == ["svm", "lda"]
    assert isinstance(found["svm"][-1], SVC)
    assert isinstance(found["lda"][-1], LinearDiscriminantAnalysis)
    assert list(CLASSIFIERS) == ["lda", "svm"]


@pytest.mark.parametrize("name", CLASSIFIERS)
def test_classifiers_work_with_few_patches_and_constant_features(name):
    rng = np.random.default_rng(0)
    labels = np.repeat([0, 1, 2], 4)
    features = rng.normal(size=(12, 200)) + 3 * labels[:, None]
    features[:, 7] = 5.0
    model = classifiers_of([name])[name].fit(features, labels)
    assert (model.predict(features) == labels).all()


def test_classifiers_of_ones_own():
    given = {"nearest": KNeighborsClassifier(1)}
    assert classifiers_of(given) == given


@pytest.mark.parametrize(
    ("given", "error", "text"),
    [
        ("lda", TypeError, "classifiers must be a list of names, or a dict; got 'lda'"),
        (3, TypeError, "classifiers must be a list of names, or a dict; got 3"),
        ([], ValueError, "classifiers is empty; known are lda, svm"),
        (["tree"], ValueError, "classifiers must be one of 'lda', 'svm'; got 'tree'"),
        (["lda", "lda"], ValueError, "classifiers holds a name twice"),
        ({"pca": PCA()}, TypeError, "'pca' must be a scikit-learn classifier; got PCA"),
        ({"svc": SVC}, TypeError, "'svc' must be a scikit-learn classifier; got <class"),
        ({3: SVC()}, TypeError, "names of classifiers must be text; got 3"),
    ],
)
def test_classifiers_that_cannot_be(given, error, text):
    with pytest.raises(error, match=text):
        classifiers_of(given)


# Variants -----------------------------------------------------------------------------------

BY_FAMILY = {"smooth": 8, "curvature": 4, "contrast": 4}
BASES = {
    "default": {},
    "curves at levels": {"basis": "levels"},
    "whole curves": full_curves(),
    "directional": {"directional": True},
    "rank": {"basis": "levels", "level_rule": "rank"},
    "fixed": {"basis": "levels", "level_rule": "fixed", "levels": [-1.0, 0.0, 1.0]},
    "fitted": {"basis": "levels", "level_rule": "fitted"},
    "one family": {"smooth": (2,), "curvature": (), "contrast": ()},
    "raw alone": {"raw": True, "smooth": (), "curvature": (), "contrast": ()},
    "one functional": {"functionals": ("area",)},
    "two functionals": {"functionals": ["euler", "area"]},
    "numbers of the scale alone": {"functionals": ()},
    "crossings alone": {"functionals": (), "directional": True},
    "scale": {"location_scale": "scale"},
    "ratio": {"location_scale": "ratio"},
    "no scale": {"location_scale": False},
    "together": {"separate_scale": False},
    "levels by family": {"basis": "levels", "levels": BY_FAMILY},
    "given levels": {"basis": "levels", "levels": (-1, 0, 1)},
    "levels of NumPy": {"levels": np.int64(24)},
    "ranges": {"basis": "levels", "level_range": (-2, 2)},
    "no roughness": {"roughness": ()},
    "bands and slopes": {"band": (2,), "slope": (2,), "smooth": [2, 3]},
    "fixed Gaussians": {"scale_rule": "fixed"},
    "lengths": {"scale_unit": "length", "pitch": 0.5},
}
every_base = pytest.mark.parametrize("base", BASES)


def settings_of(transformer):
    return transformer._plan().settings()


def changed_parameters(base, variant):
    """Return the parameters in which two transformers differ."""
    one, two = (t.get_params() for t in (base, variant))
    return {name: two[name] for name in one if repr(one[name]) != repr(two[name])}


@pytest.fixture(scope="module")
def patches():
    return np.random.default_rng(0).normal(size=(2, 48, 48))


@every_base
def test_every_variant_differs_and_works(base, patches):
    own = MinkowskiCurves(**BASES[base])
    before = dict(own.get_params())
    found = variants_of(own)
    assert own.get_params() == before
    assert len(found) > 10
    seen = [settings_of(own)]
    for variant in found.values():
        assert settings_of(variant) not in seen
        seen.append(settings_of(variant))
        vectors = variant.fit_transform(patches)
        assert vectors.shape == (2, len(variant.get_feature_names_out()))
        assert vectors.shape[1] > 0
        assert np.isfinite(vectors).all()


def families_of(transformer):
    return {field for field, _ in settings_of(transformer)["fields"]}


@every_base
def test_a_variant_changes_what_its_name_says_and_nothing_else(base):
    own = MinkowskiCurves(**BASES[base])
    functionals, families = set(own.functionals), families_of(own)
    field_parameters = {"raw", "smooth", "band", "slope", "curvature", "contrast"}
    for name, variant in variants_of(own).items():
        changes = changed_parameters(own, variant)
        word, _, part = name.partition(" ")
        if part in functionals and word in ("without", "only"):
            assert set(changes) == {"functionals"}
            expected = functionals - {part} if word == "without" else {part}
            assert set(variant.functionals) == expected
        elif part in families and word in ("without", "only"):
            assert set(changes) <= field_parameters
            assert families_of(variant) == (families - {part} if word == "without" else {part})
            kept = [f for f in settings_of(own)["fields"] if f[0] in families_of(variant)]
            assert settings_of(variant)["fields"] == kept
        elif name.endswith(" levels") and word.isdigit():
            assert changes == {"levels": int(word)}
        else:
            expected = {
                "without location and scale": {"location_scale"},
                "scale as ratios": {"location_scale"},
                "only location and scale": {"functionals", "directional", "location_scale"},
                "with directions": {"directional"},
                "curves at levels": {"basis", "level_range"},
                "rank levels": {"basis", "level_range", "level_rule"},
                "scale not apart": {"separate_scale", "location_scale"},
                "fixed Gaussians": {"scale_rule", *field_parameters},
                "whole curves of fixed fields": {*full_curves(), "location_scale"},
            }[name]
            assert changes
            assert set(changes) <= expected, name


def test_the_variants_of_the_default():
    parts = ["area", "contour", "euler", "anisotropy"]
    families = ["smooth", "curvature", "contrast"]
    assert list(variants_of(MinkowskiCurves())) == [
        *(f"without {one}" for one in parts), *(f"only {one}" for one in parts),
        *(f"without {one}" for one in families), *(f"only {one}" for one in families),
        "without location and scale", "scale as ratios", "only location and scale",
        "with directions", "curves at levels", "rank levels", "8 levels", "32 levels",
        "64 levels", "scale not apart", "fixed Gaussians", "whole curves of fixed fields",
    ]  # fmt: skip


def test_what_variants_of_the_default_hold():
    found = variants_of(MinkowskiCurves())

    def names(variant):
        return set(found[variant].get_feature_names_out())

    everything = set(MinkowskiCurves().get_feature_names_out())
    for part in ("area", "contour", "euler", "anisotropy"):
        own = {name for name in everything if f"_{part}_h" in name}
        assert own
        assert names(f"without {part}") == everything - own
        assert names(f"only {part}") == own | {n for n in everything if n.startswith("rough_")}
    rough = {name for name in everything if name.startswith("rough_")}
    assert names("only location and scale") == rough
    assert names("without location and scale") == everything - rough
    assert names("scale as ratios") - everything == {"rough_3_log_std"}  # in place of a contrast
    assert not any("contrast" in name and "rough" in name for name in names("scale as ratios"))
    assert {n for n in names("with directions") - everything if "crossings" not in n} == set()
    whole = found["whole curves of fixed fields"]
    assert whole.fingerprint() == MinkowskiCurves(**full_curves()).fingerprint()


def test_parts_that_are_alone_are_not_left_out():
    found = variants_of(MinkowskiCurves(functionals=("area",), curvature=(), contrast=()))
    assert not any(name.endswith((" area", " smooth")) for name in found)
    # of two, "without one" is "only the other", and stands once
    two = variants_of(MinkowskiCurves(functionals=("area", "euler")))
    assert {"without area", "without euler"} <= set(two)
    assert not {"only area", "only euler"} & set(two)


@pytest.mark.parametrize("given", ["scale", "ratio", True, False])
def test_whatever_tells_the_scale_may_stand_together_with_the_rest(given):
    found = variants_of(MinkowskiCurves(location_scale=given))
    assert found["scale not apart"].location_scale is bool(given)
    assert found["whole curves of fixed fields"].location_scale is bool(given)


def test_variants_of_a_fitted_transformer_are_not_fitted(patches):
    own = MinkowskiCurves(basis="levels", level_rule="fitted")
    fitted = MinkowskiCurves(basis="levels", level_rule="fitted").fit(patches)
    assert list(variants_of(fitted)) == list(variants_of(own))
    assert not any(hasattr(variant, "levels_") for variant in variants_of(fitted).values())


def test_settings_that_exclude_each_other_make_no_variant():
    found = variants_of(MinkowskiCurves(**BASES["levels by family"]))
    assert "whole curves of fixed fields" not in found  # of the raw field no level is known
    assert "fixed Gaussians" in found
    assert "rank levels" not in variants_of(MinkowskiCurves(**BASES["given levels"]))
