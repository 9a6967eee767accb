"""`MinkowskiCurves`: image patches in, fixed-length vectors out, as a scikit-learn transformer."""

from collections.abc import Callable, Iterator
from numbers import Integral
from typing import Any, ClassVar

import numpy as np
from joblib import Parallel, delayed
from sklearn.base import BaseEstimator, TransformerMixin
from sklearn.exceptions import NotFittedError
from sklearn.utils._param_validation import Options, StrOptions

from mfeat import stacks
from mfeat.fields import SCALE_RULES, SCALE_UNITS
from mfeat.functionals import CONTOUR_ESTIMATORS, FUNCTIONALS
from mfeat.levels import RULES, pooled_levels
from mfeat.plan import (
    BASES,
    VECTOR_FUNCTIONALS,
    Feature,
    VectorPlan,
    canonical_sha256,
    learned_key,
)
from mfeat.settings import resolve, with_learned
from mfeat.vector import groups_of, rows_of, samples_of

#: Number of pixel values that `fit` keeps of each field to learn levels from, or 16 a patch if that
#: is more.
FIT_SAMPLE = 1 << 19

# Groups handed to the workers at a time: their rows wait until all of them are done.
_GROUPS_AT_ONCE = 32


class MinkowskiCurves(TransformerMixin, BaseEstimator):
    """Turn image patches into vectors of Minkowski curves.

    Each patch becomes several scalar fields (smoothings, bands, slope, curvature, contrast, the
    image itself); of each field the area, contour length, Euler number and anisotropy of its level
    sets are taken at every level, exactly counted. The vector holds these curves, or few numbers
    that describe them. Its length, names and order follow from the parameters alone.

    The defaults were chosen by measurement, see the README: compact, alike for a patch under other
    light, orientation, noise and focus. `full_curves` gives the parameters of whole curves of fixed
    fields, in physical units.

    Parameters
    ----------
    functionals : tuple of str, default ("area", "contour", "euler", "anisotropy")
        Functionals to take; their order in the vector is fixed. "anisotropy" is by how much
        contours lie across one direction, whichever that is: see `mfeat.functionals.anisotropy_of`.
    basis : {"hermite", "levels"}, default "hermite"
        "levels": each curve enters by its values at all levels. "hermite": by its products with a
        few Hermite functions, see `mfeat.basis`; level rule "standard" only.
    terms : int or dict, optional
        Number of Hermite functions, 1 to 16, for all functionals or by functional; default
        ``{"area": 4, "contour": 2, "euler": 4, "anisotropy": 3}``.
    levels : int, sequence of float, or dict, default 16
        Number of levels (1 to 65,535), or the levels themselves in the units of the rule. A dict
        gives either one per field family, e.g. ``{"raw": 32, "slope": 8}``.
    level_rule : {"standard", "rank", "fixed", "fitted"}, default "standard"
        "standard": standard deviations of each patch's field from its mean; gain and offset of the
        image do not matter. "rank": fractions of the field's pixels; on the raw field (tilt not
        removed) no monotone tone change matters. "fixed": data units of the field. "fitted":
        quantiles of the field over the training patches, learned in `fit`.
    level_range : (float, float) or dict, optional
        Range of a number of levels in the units of the rule; default (-2.5, 2.5) for "standard",
        (-3, 3) for it under basis "hermite", (0, 1) for "rank" and "fitted"; required for "fixed".
        A dict gives one per field family.
    raw : bool, default False
        Whether the image itself is a field.
    smooth : tuple of float, default (1.5, 2.1)
        Scales of the smoothings; () for none.
    band : tuple of float, default ()
        Scales of the bands: the smoothing at s minus that at 2 s.
    slope : tuple of float, default ()
        Scales at which the gradient magnitude is taken (0: of the image itself), in data units per
        length.
    curvature : tuple of float, default (1.5, 2.1)
        Scales at which minus half the Laplacian is taken, in data units per length^2.
    contrast : tuple of float, default (1.5, 2.1)
        Scales at which the smoothed image is divided by its own local contrast: its difference
        from the local mean, over the local standard deviation, both in a Gaussian window of 1.4
        times the scale (2.5 times under "fixed"). Uneven light and gain do not matter.
    scale_rule : {"matched", "fixed"}, default "matched"
        "fixed": a scale is the standard deviation of a Gaussian. "matched": a scale is a length of
        detail (root mean square gradient over curvature), which each patch is given by a Gaussian
        of its own, at most a quarter of its side wide: see `mfeat.matching`. Focus, noise and
        sharpness of the measurement matter less.
    remove_tilt : bool, default False
        Whether each patch's least-squares plane is levelled before fields are taken, about its
        mean. For height maps: tilt and coarse form otherwise enter the raw and smoothed fields
        fully, slope through its magnitude, and bands and curvature through the patch's border.
    location_scale : bool, "scale" or "ratio", default True
        Which numbers tell location and scale, beside the curves. With `separate_scale`: True: the
        logarithms of contrast, standard deviation, gradient and curvature under each Gaussian of
        `roughness`; "scale": without the contrast, for height maps whose zero means nothing;
        "ratio": only ratios, on which gain has no influence. Without `separate_scale`, True: the
        standard deviation of each field, and the mean of raw and slope fields. False: none.
    separate_scale : bool, default True
        Whether the shape of curves is separated from their scale: contour and anisotropy are
        multiplied by the field's correlation length (standard deviation over root mean square slope
        in one direction), the Euler number by its square, which makes pure numbers of them.
        Gaussian fields then have the same curves, whatever their size.
    roughness : tuple of float, default (1.1, 3)
        Gaussian scales under which the numbers of the scale are taken: "log_std", the logarithm of
        the standard deviation; "log_slope" and "log_curvature", of the root mean squares of
        gradient and curvature; all but the first divided by the first's deviation. "log_contrast":
        of the deviation over the root mean square of the pixels, in place of later deviations.
    directional : bool, default False
        Whether the crossing densities of four directions are features; they tell orientations
        apart and change when the part is turned.
    connectivity : {4, 8, "mean"}, default "mean"
        Connectivity of the Euler number.
    contour_estimator : {"crofton-4", "crofton-2", "pixel-edge", "duda"}, default "crofton-4"
        See `mfeat.functionals.contour`.
    pitch : float or (float, float), default 1.0
        Pixel pitch, or (row pitch, column pitch).
    scale_unit : {"pitch", "length"}, default "pitch"
        Whether scales count pitches, or are lengths in the unit of `pitch`. With "length" the same
        surface scanned at another pitch gives comparable vectors: set the new `pitch`, leave the
        scales.
    channels : tuple of str, optional
        Names of the channels of X of shape (n, h, w, c); each has a vector of its own, side by
        side. Required for 4-D X, refused for others.
    min_valid : float, default 0.5
        Smallest share of 2x2 windows with four valid pixels that a patch may have, 0 to 1. In any
        case each field needs at least one such window.
    below_min_valid : {"error", "nan"}, default "error"
        What becomes of a patch below it: a ValueError that lists all such patches, or a row of
        NaN. Infinite pixels, and values too large or too fine to compute with, always raise.
    dtype : {"float32", "float64"}, default "float32"
        Type of the output.
    n_jobs : int, optional
        Number of joblib workers: None is 1 unless in a joblib context, -1 all processors. Threads
        by default, since the compiled kernels run without Python's lock; any joblib backend gives
        identical values.

    Attributes
    ----------
    levels_ : dict of str to ndarray
        Learned levels in data units by field, e.g. "smooth_2", or with channels by channel and
        field, e.g. "red_smooth_2"; only after `fit` with rule "fitted".

    Notes
    -----
    X is an array (n, h, w), an array (n, h, w, c), or a list of 2-D arrays of any sizes; integers,
    bool or floating-point. Missing pixels are NaN, or masked in a numpy.ma.MaskedArray. A patch
    without relief (all pixels equal) has a defined vector; see `mfeat.levels`.

    Apart from rule "fitted", nothing is learned, and `transform` works without `fit`.

    Memory beyond X and the result, with the default settings: about 40 MB a worker (patches are
    taken in groups of some 260,000 pixels, fewer where levels are many), or some 105 bytes a pixel
    of the largest patch if that is more, and some 400 bytes a patch (1000 if it is masked). Each
    further scale adds 8 bytes a pixel of a group, each level and field some hundred bytes. `fit`
    with rule "fitted" keeps half a million values of each field, or 16 a patch if that is more.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat import MinkowskiCurves
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> transformer = MinkowskiCurves()
    >>> X = transformer.fit_transform(patches)
    >>> len(X), X.dtype
    (5, dtype('float32'))
    >>> [str(name) for name in transformer.get_feature_names_out()[[1, 7, 8]]]
    ['rough_..._log_std', 'smooth_..._area_h0', 'smooth_..._area_h1']

    Whole curves, in physical units:

    >>> from mfeat.transformer import full_curves
    >>> curves = MinkowskiCurves(**full_curves(), pitch=0.01)
    >>> curves.fit_transform(patches).shape
    (5, 395)
    """

    # Constraints that scikit-learn can word well; `mfeat.settings` checks the others.
    _parameter_constraints: ClassVar[dict] = {
        "functionals": [tuple, list],
        "basis": [StrOptions(set(BASES))],
        "terms": "no_validation",
        "levels": "no_validation",
        "level_rule": [StrOptions(set(RULES))],
        "level_range": "no_validation",
        "raw": ["boolean"],
        "smooth": "no_validation",
        "band": "no_validation",
        "slope": "no_validation",
        "curvature": "no_validation",
        "contrast": "no_validation",
        "scale_rule": [StrOptions(set(SCALE_RULES))],
        "remove_tilt": ["boolean"],
        "location_scale": ["boolean", StrOptions({"scale", "ratio"})],
        "separate_scale": ["boolean"],
        "roughness": "no_validation",
        "directional": ["boolean"],
        "connectivity": [StrOptions({"mean"}), Options(Integral, {4, 8})],
        "contour_estimator": [StrOptions(set(CONTOUR_ESTIMATORS))],
        "pitch": "no_validation",
        "scale_unit": [StrOptions(set(SCALE_UNITS))],
        "channels": [tuple, list, None],
        "min_valid": "no_validation",
        "below_min_valid": [StrOptions({"error", "nan"})],
        "dtype": [StrOptions({"float32", "float64"})],
        "n_jobs": "no_validation",
    }

    def __init__(
        self,
        functionals=VECTOR_FUNCTIONALS,
        basis="hermite",
        terms=None,
        levels=16,
        level_rule="standard",
        level_range=None,
        raw=False,
        smooth=(1.5, 2.1),
        band=(),
        slope=(),
        curvature=(1.5, 2.1),
        contrast=(1.5, 2.1),
        scale_rule="matched",
        remove_tilt=False,
        location_scale=True,
        separate_scale=True,
        roughness=(1.1, 3),
        directional=False,
        connectivity="mean",
        contour_estimator="crofton-4",
        pitch=1.0,
        scale_unit="pitch",
        channels=None,
        min_valid=0.5,
        below_min_valid="error",
        dtype="float32",
        n_jobs=None,
    ):
        self.functionals = functionals
        self.basis = basis
        self.terms = terms
        self.levels = levels
        self.level_rule = level_rule
        self.level_range = level_range
        self.raw = raw
        self.smooth = smooth
        self.band = band
        self.slope = slope
        self.curvature = curvature
        self.contrast = contrast
        self.scale_rule = scale_rule
        self.remove_tilt = remove_tilt
        self.location_scale = location_scale
        self.separate_scale = separate_scale
        self.roughness = roughness
        self.directional = directional
        self.connectivity = connectivity
        self.contour_estimator = contour_estimator
        self.pitch = pitch
        self.scale_unit = scale_unit
        self.channels = channels
        self.min_valid = min_valid
        self.below_min_valid = below_min_valid
        self.dtype = dtype
        self.n_jobs = n_jobs

    def fit(self, X: Any, y: Any = None) -> "MinkowskiCurves":
        """Check the parameters and the shapes of the patches; learn levels if the rule is "fitted".

        Levels are learned from patches that `transform` would accept; what becomes of others is
        decided by `below_min_valid`, as there.

        Parameters
        ----------
        X : array of shape (n, h, w) or (n, h, w, c), or list of 2-D arrays
            Patches; see the Notes of the class.
        y : ignored

        Returns
        -------
        self
        """
        plan = self._plan()
        patches = stacks.collect(X, plan.channels)
        groups = groups_of(plan, patches)
        self.__dict__.pop("levels_", None)
        self.__dict__.pop("_fitted_plan", None)
        if plan.level_rule == "fitted":
            self.levels_ = self._learn(plan, groups, len(patches))
            self._fitted_plan = plan
        return self

    def transform(self, X: Any) -> np.ndarray:
        """Return one vector a patch.

        Parameters
        ----------
        X : array of shape (n, h, w) or (n, h, w, c), or list of 2-D arrays
            Patches; see the Notes of the class.

        Returns
        -------
        ndarray of shape (n, n_features), float32 or float64
            Rows of NaN for patches refused under ``below_min_valid="nan"``.

        Raises
        ------
        ValueError
            For patches that are too small, hold infinities, or have too few valid pixels.
        NotFittedError
            With rule "fitted", before `fit`.
        """
        plan = self._plan(learned=True)
        patches = stacks.collect(X, plan.channels)
        span = plan.length
        out = np.full((len(patches), span * patches.n_channels), np.nan, dtype=self.dtype)
        groups = groups_of(plan, patches)
        refused = []
        done = self._parallel(rows_of, plan, groups, float(self.min_valid))
        for group, (rows, reasons) in zip(groups, done, strict=True):
            start = group.channel * span
            out[group.positions, start : start + span] = rows
            refused.extend(_told(group, reasons))
        self._complain(refused, len(patches))
        out[[position for position, _, _ in refused]] = np.nan
        return out

    def get_feature_names_out(self, input_features: Any = None) -> np.ndarray:
        """Return the names of the vector's numbers, e.g. "smooth_2_contour_07".

        Parameters
        ----------
        input_features : ignored
            Present for scikit-learn's interface.

        Returns
        -------
        ndarray of str objects
        """
        return np.array([feature.name for feature in self.feature_table()], dtype=object)

    def feature_table(self) -> list[Feature]:
        """Return what each number of the vector is, in order.

        Returns
        -------
        list of Feature
            Named tuples (name, field, scale, functional, level, unit);
            ``pandas.DataFrame(transformer.feature_table())`` is a table.

        Examples
        --------
        >>> from mfeat import MinkowskiCurves
        >>> MinkowskiCurves(smooth=(1.5,)).feature_table()[7]
        Feature(name='smooth_1.5_area_h0', field='smooth', scale=1.5, functional='area', level=None,
        unit='1', term=0)
        """
        return self._plan().all_features()

    def settings(self) -> dict[str, Any]:
        """Return all that the values depend on (not `n_jobs`), in types that JSON knows."""
        return self._plan(learned=True).settings() | {
            "min_valid": float(self.min_valid),
            "below_min_valid": self.below_min_valid,
        }

    def fingerprint(self) -> str:
        """Return the SHA-256 of the settings as canonical JSON: 64 hexadecimal digits.

        Equal settings have equal fingerprints on every machine. With rule "fitted" the learned
        levels are part of it, so it needs `fit` first.

        Examples
        --------
        >>> from mfeat import MinkowskiCurves
        >>> one = MinkowskiCurves(smooth=(1, 2), n_jobs=2)
        >>> other = MinkowskiCurves(smooth=[1.0, 2.0])
        >>> one.fingerprint() == other.fingerprint()
        True
        """
        return canonical_sha256(self.settings())

    def _plan(self, learned: bool = False) -> VectorPlan:
        """Return the plan of the parameters as they are now, with or without learned levels."""
        plan = resolve(self)
        if not (learned and plan.level_rule == "fitted"):
            return plan
        if not hasattr(self, "levels_"):
            raise NotFittedError(
                'MinkowskiCurves with level_rule="fitted" learns its levels from training '
                "patches: call fit before this"
            )
        return with_learned(plan, self._fitted_plan, self.levels_)

    def _parallel(
        self, work: Callable, plan: VectorPlan, groups: list[stacks.Group], option: Any
    ) -> Iterator:
        """Yield the work of each group, in their order, without keeping what was yielded."""
        if len(groups) == 1:  # no scheduling for a single patch in a stream
            yield work(plan, groups[0], option)
            return
        jobs = self.n_jobs if self.n_jobs is None else min(int(self.n_jobs), len(groups))
        parallel = Parallel(n_jobs=jobs, prefer="threads")
        for start in range(0, len(groups), _GROUPS_AT_ONCE):
            some = groups[start : start + _GROUPS_AT_ONCE]
            yield from parallel(delayed(work)(plan, group, option) for group in some)

    def _learn(
        self, plan: VectorPlan, groups: list[stacks.Group], n_patches: int
    ) -> dict[str, np.ndarray]:
        """Learn levels as order statistics of each field of each channel over all patches."""
        size = min(max(FIT_SAMPLE // n_patches, 16), 4096)
        options = (size, float(self.min_valid))
        pools: dict[str, dict[int, np.ndarray]] = {}  # samples by key and position
        refused = []
        done = self._parallel(samples_of, plan, groups, options)
        for group, (pool, reasons) in zip(groups, done, strict=True):
            for key, found in pool.items():
                by_position = {group.positions[place]: one for place, one in found.items()}
                pools.setdefault(key, {}).update(by_position)
            refused.extend(_told(group, reasons))
        self._complain(refused, n_patches)
        turned_away = {position for position, _, _ in refused}  # in any channel or field
        learned = {}
        for channel in plan.channels or (None,):
            for field in plan.fields:
                key = learned_key(field, channel)
                accepted = [
                    one for position, one in pools[key].items() if position not in turned_away
                ]
                if not accepted:
                    raise ValueError(
                        f"no patch is accepted, so no level of field {key} can be learned"
                    )
                learned[key] = pooled_levels(accepted, plan.level_values[field.name])
        return learned

    def _complain(self, refused: list[tuple[int, int, str]], n_patches: int) -> None:
        """Raise for refused patches unless they are to be marked."""
        if not refused or self.below_min_valid != "error":
            return
        shown = "; ".join(text for _, _, text in sorted(refused)[:5])
        number = len({position for position, _, _ in refused})
        raise ValueError(
            f"{number} of {n_patches} patches have too few valid pixels. {shown}"
            + ("; ..." if len(refused) > 5 else "")
            + '. Leave them out, lower min_valid, or set below_min_valid="nan" to get rows of '
            "NaN for them"
        )

    def __sklearn_tags__(self):
        tags = super().__sklearn_tags__()
        tags.input_tags.two_d_array = False
        tags.input_tags.three_d_array = True
        tags.input_tags.allow_nan = True
        tags.requires_fit = self.level_rule == "fitted"
        tags.transformer_tags.preserves_dtype = []
        return tags


def full_curves() -> dict[str, Any]:
    """Return parameters of `MinkowskiCurves` for whole curves of fixed fields.

    The raw field, Gaussians of 1, 2 and 4 pitches, their octave bands, and slopes; area, contour
    and Euler number at every level, in physical units; mean and standard deviation as they are.

    Examples
    --------
    >>> from mfeat import MinkowskiCurves
    >>> from mfeat.transformer import full_curves
    >>> MinkowskiCurves(**full_curves() | {"levels": 2}).get_feature_names_out()[:4].tolist()
    ['raw_mean', 'raw_std', 'raw_area_00', 'raw_area_01']
    """
    return {
        "functionals": FUNCTIONALS, "basis": "levels", "raw": True, "smooth": (1, 2, 4),
        "band": (1, 2), "slope": (0, 2), "curvature": (), "contrast": (), "scale_rule": "fixed",
        "separate_scale": False,
    }  # fmt: skip


def _told(group: stacks.Group, reasons: dict[int, str]) -> list[tuple[int, int, str]]:
    """Return position, channel and message of each refused image of a group."""
    return [
        (group.positions[place], group.channel, f"{group.name(place)}: {reason}")
        for place, reason in reasons.items()
    ]
