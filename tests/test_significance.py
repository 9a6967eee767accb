"""Statistics of repeated splits: hand-computed values, SciPy, and simulated comparisons."""

import math

import numpy as np
import pytest
from scipy import stats

from mfeat.significance import (
    CONFIDENCE,
    compare_paired,
    corrected_error,
    holm,
    mean_with_interval,
)

ONE = np.array([0.90, 0.80, 0.85, 0.95, 0.70])
OTHER = np.array([0.80, 0.82, 0.75, 0.85, 0.72])


# The corrected error ------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("values", "ratio", "expected"),
    [
        # variance 5/3 of 1, 2, 3, 4; Nadeau and Bengio (2003): (1/J + n2/n1) s^2
        ([1, 2, 3, 4], 0.0, math.sqrt(5 / 12)),
        ([1, 2, 3, 4], 0.25, math.sqrt(5 / 6)),
        ([1, 2, 3, 4], 1.0, math.sqrt(25 / 12)),
        ([0, 1], 0.5, math.sqrt(0.5)),  # variance 1/2, times 1/2 + 1/2
        ([3, 3, 3], 0.5, 0.0),
    ],
)
def test_the_corrected_error_by_hand(values, ratio, expected):
    found = corrected_error(np.array(values, dtype=float), ratio)
    assert found == pytest.approx(expected, rel=1e-14)


def test_more_splits_never_make_the_corrected_error_vanish():
    # the part n2/n1 s^2 stays, however many splits of the same patches are drawn
    values = np.tile([0.0, 1.0], 5000)
    assert corrected_error(values, 0.25) == pytest.approx(math.sqrt(0.25) * 0.5, rel=1e-3)
    assert corrected_error(values, 0.0) == pytest.approx(0.5 / 100, rel=1e-3)


def test_a_mean_and_its_interval_agree_with_scipy_without_the_correction():
    found = mean_with_interval(ONE, 0.0)
    low, high = stats.t.interval(CONFIDENCE, len(ONE) - 1, np.mean(ONE), stats.sem(ONE))
    assert found == pytest.approx((np.mean(ONE), low, high), rel=1e-12)


def test_an_interval_by_hand():
    # mean 2, s^2 = 1, J = 3, n2/n1 = 2/3: error 1; t(.975, 2) = 4.303 (any table of Student's t)
    found = mean_with_interval(np.array([1.0, 2.0, 3.0]), 2 / 3)
    assert found.mean == 2.0
    assert (found.low, found.high) == pytest.approx((2 - 4.303, 2 + 4.303), abs=5e-4)


def test_a_single_split_has_a_mean_and_nothing_else():
    found = mean_with_interval(np.array([0.75]), 0.5)
    assert found.mean == 0.75
    assert math.isnan(found.low)
    assert math.isnan(found.high)
    paired = compare_paired(np.array([0.75]), np.array([0.5]), 0.5)
    assert paired.mean == 0.25
    assert all(map(math.isnan, paired[1:]))
    assert math.isnan(corrected_error(np.array([0.75]), 0.5))


# The paired comparison ----------------------------------------------------------------------


@pytest.mark.parametrize("seed", range(5))
def test_without_overlap_it_is_the_ordinary_paired_t_test(seed):
    rng = np.random.default_rng(seed)
    one, other = rng.normal(size=(2, 4 + 3 * seed))
    found = compare_paired(one, other, 0.0)
    expected = stats.ttest_1samp(one - other, 0.0)
    interval = expected.confidence_interval(CONFIDENCE)
    assert (found.t, found.p) == pytest.approx((expected.statistic, expected.pvalue), rel=1e-12)
    assert (found.low, found.high) == pytest.approx((interval.low, interval.high), rel=1e-12)
    assert found.mean == pytest.approx(np.mean(one - other))


@pytest.mark.parametrize("ratio", [0.1, 1.0, 4.0])
def test_the_correction_divides_t_by_a_known_factor(ratio):
    # sqrt((1/J + ratio) / (1/J)) = sqrt(1 + J ratio)
    plain, found = (compare_paired(ONE, OTHER, r) for r in (0.0, ratio))
    factor = math.sqrt(1 + len(ONE) * ratio)
    assert found.t == pytest.approx(plain.t / factor, rel=1e-12)
    assert found.high - found.low == pytest.approx(factor * (plain.high - plain.low), rel=1e-12)
    assert found.p > plain.p


def test_exchanging_the_two_turns_the_sign_only():
    there, back = compare_paired(ONE, OTHER, 0.3), compare_paired(OTHER, ONE, 0.3)
    assert back.p == there.p
    assert (back.mean, back.low, back.high, back.t) == pytest.approx(
        (-there.mean, -there.high, -there.low, -there.t), rel=1e-12
    )


@pytest.mark.parametrize("ratio", [0.05, 0.5, 2.0])
def test_the_interval_excludes_zero_just_where_p_is_below_five_percent(ratio):
    rng = np.random.default_rng(0)
    verdicts = set()
    for _ in range(200):
        found = compare_paired(rng.normal(rng.uniform(0, 4), 1, 8), np.zeros(8), ratio)
        outside = not found.low <= 0 <= found.high
        assert outside == (found.p < 1 - CONFIDENCE)
        verdicts.add(outside)
    assert verdicts == {True, False}


def test_identical_twins_do_not_differ():
    assert compare_paired(ONE, ONE.copy(), 0.25) == (0.0, 0.0, 0.0, 0.0, 1.0)


@pytest.mark.parametrize("step", [0.25, -0.25])
def test_a_difference_that_is_the_same_in_every_split_is_certain(step):
    one = np.array([0.25, 0.5, 0.75])  # exact in binary, and so are the differences
    found = compare_paired(one + step, one, 0.25)
    assert found == (step, step, step, math.copysign(math.inf, step), 0.0)


def test_unpaired_splits_are_refused():
    with pytest.raises(ValueError, match=r"paired splits are needed; got \(5,\) and \(4,\)"):
        compare_paired(ONE, OTHER[:4], 0.5)


def _error_rates(n_sets, n_patches, n_train, n_splits):
    """Return how often p < 5 % with and without the correction, for rules of equal true skill.

    Each data set: two features that tell two classes apart equally well, independently of each
    other. Each rule uses one of them: the nearest of the two class means of the training patches.
    """
    n_test = n_patches - n_train
    found = np.zeros(2)
    for seed in range(n_sets):
        rng = np.random.default_rng([7, seed])
        labels = np.arange(n_patches) % 2
        features = rng.normal(size=(2, n_patches)) + labels
        accuracy = np.empty((2, n_splits))
        for split in range(n_splits):
            order = rng.permutation(n_patches)
            train, test = order[:n_train], order[n_train:]
            zero, one = (features[:, train[labels[train] == c]].mean(axis=1) for c in (0, 1))
            sign = np.sign(one - zero)[:, None]
            answer = sign * (features[:, test] - ((zero + one) / 2)[:, None]) > 0
            accuracy[:, split] = (answer == labels[test]).mean(axis=1)
        for k, ratio in enumerate((n_test / n_train, 0.0)):
            found[k] += compare_paired(*accuracy, ratio).p < 0.05
    return found / n_sets


def test_equal_skill_is_rarely_called_different_and_often_without_the_correction():
    # 400 data sets of 100 patches, 15 random splits into 80 and 20. Measured: 4.2 % with the
    # correction, 36 % without. Nadeau and Bengio (2003) find the same of their simulations: the
    # corrected test near its size, the plain one far above. Five percent of 400 are 20 +- 4.4.
    corrected, plain = _error_rates(n_sets=400, n_patches=100, n_train=80, n_splits=15)
    assert corrected <= 0.05 + 2 * math.sqrt(0.05 * 0.95 / 400)
    assert plain > 0.25


# Several comparisons ------------------------------------------------------------------------


def test_holm_by_hand():
    # ascending .005, .01, .03, .04 times 4, 3, 2, 1: .02, .03, .06, .04; never less than before
    found = holm(np.array([0.01, 0.04, 0.03, 0.005]))
    np.testing.assert_allclose(found, [0.03, 0.06, 0.06, 0.02], rtol=1e-14)


def test_holm_is_limited_to_one_and_leaves_a_single_comparison():
    np.testing.assert_allclose(holm(np.array([0.4, 0.9, 0.6])), [1, 1, 1])
    assert holm(np.array([0.03])).tolist() == [0.03]
    assert holm(np.array([])).shape == (0,)


def test_holm_does_not_count_nan():
    found = holm(np.array([math.nan, 0.02, math.nan, 0.03]))
    assert np.isnan(found).tolist() == [True, False, True, False]
    np.testing.assert_allclose(found[[1, 3]], [0.04, 0.04], rtol=1e-14)
    assert np.isnan(holm(np.array([math.nan]))).all()


@pytest.mark.parametrize("seed", range(20))
def test_holm_keeps_the_order_and_lies_between_none_and_bonferroni(seed):
    given = np.random.default_rng(seed).random(12) ** 3
    found = holm(given)
    assert (np.diff(found[np.argsort(given)]) >= 0).all()
    assert (found >= given).all()
    assert (found <= np.minimum(1, given * len(given))).all()
    # rejecting at 5 % is the step-down rule of Holm (1979), done literally
    rejected = np.zeros(len(given), bool)
    for rank, k in enumerate(np.argsort(given)):
        if given[k] > 0.05 / (len(given) - rank):
            break
        rejected[k] = True
    assert ((found <= 0.05) == rejected).all()


def test_holm_gives_equal_values_equal_results():
    found = holm(np.array([0.02, 0.02, 0.02]))
    assert found.tolist() == pytest.approx([0.06] * 3)
    assert len(set(found.tolist())) == 1
