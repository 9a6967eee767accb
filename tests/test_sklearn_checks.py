"""scikit-learn's own estimator checks.

Its data checks give 2-D X only and are skipped, without a word but a warning, for a transformer
of 3-D X. So those that need no data are called here one by one, and the others see the
transformer through an adapter that turns rows of X into small images.
"""

import warnings

import numpy as np
import pytest
import sklearn.utils.estimator_checks as estimator_checks
from sklearn.base import BaseEstimator, TransformerMixin
from sklearn.exceptions import SkipTestWarning
from sklearn.utils.estimator_checks import check_estimator, estimator_checks_generator
from sklearn.utils.validation import _check_feature_names_in, check_is_fitted, validate_data

from mfeat import MinkowskiCurves
from mfeat.transformer import full_curves

#: Checks that need no X, or fail before they look at it. Names as of scikit-learn 1.6 to 1.9.
WITHOUT_DATA = (
    "check_do_not_raise_errors_in_init_or_set_params",
    "check_estimator_cloneable",
    "check_estimator_repr",
    "check_estimator_sparse_array",
    "check_estimator_sparse_matrix",
    "check_estimator_sparse_tag",
    "check_estimator_tags_renamed",
    "check_estimators_unfitted",
    "check_get_params_invariance",
    "check_mixin_order",
    "check_no_attributes_set_in_init",
    "check_param_validation",
    "check_parameters_default_constructible",
    "check_set_params",
    "check_transformer_n_iter",
    "check_transformers_unfitted",
    "check_valid_tag_types",
)

#: Data checks that scikit-learn runs over its own transformers, but check_estimator leaves out.
NAMED_OUTPUT = (
    "check_dataframe_column_names_consistency",
    "check_get_feature_names_out_error",
    "check_global_output_transform_pandas",
    "check_global_set_output_transform_polars",
    "check_set_output_transform",
    "check_set_output_transform_pandas",
    "check_set_output_transform_polars",
    "check_transformer_get_feature_names_out",
    "check_transformer_get_feature_names_out_pandas",
)

#: The checks of the adapter that skip themselves, where scikit-learn has them: this one runs only
#: where the environment sets SCIPY_ARRAY_API, and concerns array types that we do not accept.
KNOWN_SKIPS = {"check_array_api_input"}

#: At least so many checks of the adapter pass: counted with scikit-learn 1.9.
FEWEST = 44

#: The raw field alone, which the smallest images have.
RAW = full_curves() | {"smooth": (), "band": (), "slope": ()}

VARIANTS = [
    {},
    {"basis": "levels", "level_rule": "fitted"},
    {"channels": ("a", "b"), "smooth": (), "n_jobs": 2},
]


class RowsAsImages(TransformerMixin, BaseEstimator):
    """Each row of a 2-D X as an image of three rows, each shifted by one pixel, for the checks."""

    def __init__(self, levels=3, level_rule="standard"):
        self.levels = levels
        self.level_rule = level_rule

    def fit(self, X, y=None):
        images = self._images(X, reset=True)
        self.curves_ = MinkowskiCurves(
            **RAW | {"levels": self.levels, "level_rule": self.level_rule},
            below_min_valid="nan",
            dtype="float64",
        )
        self.curves_.set_output(transform="default").fit(images)  # only the adapter makes frames
        return self

    def transform(self, X):
        check_is_fitted(self)
        return self.curves_.transform(self._images(X, reset=False))

    def get_feature_names_out(self, input_features=None):
        check_is_fitted(self)
        _check_feature_names_in(self, input_features)
        return self.curves_.get_feature_names_out()

    def _images(self, X, reset):
        X = validate_data(self, X, reset=reset, dtype="numeric", ensure_all_finite="allow-nan")
        row = np.concatenate([X, X[:, :1], -X], axis=1)  # at least 3 pixels, never all equal
        return np.stack([np.roll(row, shift, axis=1) for shift in range(3)], axis=1)

    def __sklearn_tags__(self):
        tags = super().__sklearn_tags__()
        tags.input_tags.allow_nan = True
        tags.transformer_tags.preserves_dtype = []
        return tags


class Careless(RowsAsImages):
    """An adapter with a planted fault: it changes a parameter in fit."""

    def fit(self, X, y=None):
        super().fit(X, y)
        self.levels = self.levels + 1
        return self


def name_of(check):
    return getattr(check, "func", check).__name__


def available(names):
    return [name for name in names if hasattr(estimator_checks, name)]


# Directly -----------------------------------------------------------------------------------


def test_the_lists_of_checks_are_alive():
    # all 17 and 9 are in scikit-learn 1.6 to 1.9; a later version may rename a few
    assert len(available(WITHOUT_DATA)) >= 14
    assert len(available(NAMED_OUTPUT)) >= 6


@pytest.mark.parametrize("variant", VARIANTS, ids=["default", "fitted", "channels"])
@pytest.mark.parametrize("name", available(WITHOUT_DATA))
def test_checks_without_data(name, variant):
    getattr(estimator_checks, name)("MinkowskiCurves", MinkowskiCurves(**variant))


def test_checks_without_data_can_fail():
    class Ignorant(MinkowskiCurves):
        def fit(self, X, y=None):
            return self

    with pytest.raises(AssertionError, match="Ignorant does not raise an informative error"):
        estimator_checks.check_param_validation("Ignorant", Ignorant())


def test_alone_the_transformer_would_pass_one_check_only():
    # this is why the adapter exists
    with pytest.warns(SkipTestWarning, match="Can't test estimator MinkowskiCurves"):
        results = check_estimator(MinkowskiCurves(), on_skip=None)
    assert [result["check_name"] for result in results] == ["check_estimator_cloneable"]


def test_tags():
    tags = MinkowskiCurves().__sklearn_tags__()
    assert not tags.input_tags.two_d_array
    assert tags.input_tags.three_d_array
    assert tags.input_tags.allow_nan
    assert not tags.input_tags.sparse
    assert not tags.target_tags.required
    # only rule "fitted" learns anything
    assert not tags.requires_fit
    assert MinkowskiCurves(level_rule="fitted").__sklearn_tags__().requires_fit


# Through the adapter ------------------------------------------------------------------------


@pytest.mark.parametrize("level_rule", ["standard", "fitted"])
def test_data_checks_through_the_adapter(level_rule):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        results = check_estimator(
            RowsAsImages(level_rule=level_rule), on_skip=None, on_fail="raise"
        )
    by_status = {}
    for result in results:
        by_status.setdefault(result["status"], []).append(result["check_name"])
    assert set(by_status) <= {"passed", "skipped"}
    assert set(by_status.get("skipped", [])) <= KNOWN_SKIPS
    assert len(by_status["passed"]) >= FEWEST
    # the ones that matter most to us
    assert {
        "check_methods_sample_order_invariance",
        "check_methods_subset_invariance",
        "check_fit_idempotent",
        "check_dict_unchanged",
        "check_estimators_pickle",
        "check_readonly_memmap_input",
        "check_transformer_general",
    } <= set(by_status["passed"])


# these checks fit a data frame and transform an array on purpose, and the other way round
@pytest.mark.filterwarnings("ignore:X (has|does not have valid) feature names:UserWarning")
@pytest.mark.parametrize("name", available(NAMED_OUTPUT))
def test_checks_of_named_output_through_the_adapter(name):
    getattr(estimator_checks, name)("RowsAsImages", RowsAsImages())


def test_every_generated_check_is_run():
    generated = [name_of(check) for _, check in estimator_checks_generator(RowsAsImages())]
    assert len(generated) >= FEWEST
    # check_estimator may not drop any that the generator yields
    results = check_estimator(RowsAsImages(), on_skip=None, on_fail=None)
    assert [result["check_name"] for result in results] == generated


def test_the_adapter_is_checked_in_earnest():
    results = check_estimator(Careless(), on_skip=None, on_fail=None)
    failed = [result["check_name"] for result in results if result["status"] == "failed"]
    assert "check_estimators_overwrite_params" in failed
