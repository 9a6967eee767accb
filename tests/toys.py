"""Small images, and descriptors and classifiers that do one thing, for tests of comparisons."""

import numpy as np
from scipy.ndimage import gaussian_filter
from sklearn.base import BaseEstimator, ClassifierMixin, TransformerMixin

from mfeat import MinkowskiCurves
from mfeat.conditions import Scene, margin_for
from mfeat.contest import Contest
from mfeat.trials import half_splits

SIZE = (16, 16)

#: Keywords that make `compare` quick.
QUICK = {"size": 16, "train": (2, 4), "test": 4, "repeats": 2, "jobs": 1, "progress": False}


def small_curves(**changes):
    """A short vector of ours that 16x16 patches suffice for."""
    short = {"smooth": (1.5,), "curvature": (), "contrast": (), "levels": 8, "roughness": (1,)}
    return MinkowskiCurves(**short | changes)


def texture(seed, scale, shape=(96, 96), dtype=np.uint8):
    """Smoothed noise of mean 128 and deviation 40 (grey), or of 0 and 1 (heights)."""
    noise = gaussian_filter(np.random.default_rng(seed).normal(size=shape), scale)
    noise = (noise - noise.mean()) / noise.std()
    if np.dtype(dtype).kind == "f":
        return noise.astype(dtype)
    return np.clip(128 + 40 * noise, 0, 255).astype(dtype)


def write_textures(folder, count=3, **how):
    """Write textures of `count` different scales as texture0.npy, texture1.npy, ..."""
    folder.mkdir(exist_ok=True)
    for k in range(count):
        np.save(folder / f"texture{k}.npy", texture(k, 0.6 + 0.8 * k, **how))
    return folder


def scenes_of(classes, per_class, seed=0, dtype=np.uint8):
    """Scenes of textures whose scale grows with the class, and their classes."""
    margin = margin_for(SIZE)
    side = SIZE[0] + 2 * margin
    scale = 255.0 if np.dtype(dtype).kind == "u" else 1.0
    labels = np.repeat(np.arange(classes), per_class)
    return [
        Scene(texture([seed, k], 0.6 + 0.8 * label, (side, side), dtype), margin, scale)
        for k, label in enumerate(labels)
    ], labels


def contest_of(classifiers, *, conditions=("clean", "noise"), sizes=(2, 4), dtype=np.uint8, seed=0):
    """A contest of three classes of ten scenes, five in each half, with two splits."""
    scenes, labels = scenes_of(3, 10, seed, dtype)
    halves = np.tile(np.repeat([0, 1], 5), 3)
    splits = half_splits(labels, halves, sizes[-1], 4, 2, seed)
    return Contest(scenes, labels, splits, sizes, conditions, classifiers, SIZE, seed)


def as_stack(X):
    """Patches as float64 (n, h, w)."""
    return np.stack([np.ma.filled(np.ma.asarray(x).astype(float), np.nan) for x in X])


class Stateless(TransformerMixin, BaseEstimator):
    """Base of transformers whose `fit` learns nothing, and which say so."""

    def fit(self, X, y=None):
        return self

    def __sklearn_tags__(self):
        tags = super().__sklearn_tags__()
        tags.requires_fit = False
        return tags


class Slopes(Stateless):
    """Mean square differences along rows and columns over the variance: tells scales apart."""

    def __init__(self, doubled=False):
        self.doubled = doubled

    def transform(self, X):
        X = np.nan_to_num(as_stack(X))
        deviation = X.std(axis=(1, 2))
        slopes = [np.square(np.diff(X, axis=k)).mean(axis=(1, 2)) / deviation**2 for k in (1, 2)]
        return np.stack([np.log(deviation) / 10, *slopes], axis=1)


class Blind(Stateless):
    """Numbers that have nothing to do with the texture: a hash of the pixels."""

    def transform(self, X):
        return np.stack([
            np.random.default_rng(list(np.ascontiguousarray(x).tobytes()[:64])).normal(size=3)
            for x in as_stack(X)
        ])  # fmt: skip


class Breaks(Slopes):
    """Goes wrong in one way."""

    def __init__(self, how="raise", doubled=False):
        super().__init__(doubled)
        self.how = how

    def fit(self, X, y=None):
        if self.how == "fit":
            raise RuntimeError("cannot\n be fitted")
        return self

    def transform(self, X):
        rows = super().transform(X)
        if self.how == "raise":
            raise ValueError("cannot be transformed")
        if self.how == "missing" and np.isnan(as_stack(X)).any():
            raise ValueError("a pixel is missing")
        if self.how == "nan":
            rows[-1, 0] = np.nan
        elif self.how == "inf":
            rows[:, 1] = -np.inf
        elif self.how == "short":
            rows = rows[:-1]
        elif self.how == "flat":
            rows = rows[:, 0]
        elif self.how == "text":
            rows = rows.astype(str)
        elif self.how == "objects":
            rows = rows.astype(object)
        elif self.how == "complex":
            rows = rows.astype(complex)
        elif self.how == "none":
            rows = None
        elif self.how == "empty":
            rows = rows[:, :0]
        elif self.how == "width" and np.isnan(as_stack(X)).any():
            rows = np.hstack([rows, rows])
        return rows


class Untagged:
    """A transformer of no base class: fit, transform and get_params only."""

    def get_params(self, deep=True):
        return {}

    def fit(self, X, y=None):
        return self

    def transform(self, X):
        return Slopes().transform(X)


class Uncloneable(Slopes):
    """Its constructor changes what it is given, which scikit-learn's `clone` refuses."""

    def __init__(self, doubled=(1,)):
        self.doubled = list(doubled)


class Writes(Slopes):
    """Writes into its input."""

    def transform(self, X):
        rows = super().transform(X)
        for x in X:
            x[...] = 0
        return rows


class Spy(TransformerMixin, BaseEstimator):
    """Learns the mean of its training patches, and keeps in `seen` what it was given."""

    seen = ()

    def fit(self, X, y=None):
        Spy.seen.append(("fit", [np.array(x) for x in X], None if y is None else list(y)))
        self.mean_ = as_stack(X).mean()
        return self

    def transform(self, X):
        Spy.seen.append(("transform", [np.array(x) for x in X], None))
        return Slopes().transform(X) + self.mean_


class QuietSpy(Stateless):
    """Learns nothing, and keeps in `seen` what it was given."""

    seen = ()

    def fit(self, X, y=None):
        QuietSpy.seen.append(("fit", len(X)))
        return self

    def transform(self, X):
        QuietSpy.seen.append(("transform", [np.array(x) for x in X]))
        return Slopes().transform(X)


class Nearest(ClassifierMixin, BaseEstimator):
    """Nearest mean of a class, or an answer that goes wrong in one way."""

    def __init__(self, how="well"):
        self.how = how

    def fit(self, X, y):
        if self.how == "fit":
            raise ValueError("cannot be trained")
        self.classes_ = np.unique(y)
        self.means_ = np.stack([X[y == c].mean(axis=0) for c in self.classes_])
        return self

    def predict(self, X):
        if self.how == "predict":
            raise ValueError("cannot answer")
        distance = np.square(X[:, None] - self.means_).sum(axis=2)
        answer = self.classes_[np.argmin(distance, axis=1)]
        if self.how == "in turn":
            return self.classes_[np.arange(len(X)) % len(self.classes_)]
        if self.how == "short":
            return answer[1:]
        return answer[:, None] if self.how == "column" else answer


class Calls(Stateless):
    """Holds a function, whose text has an address."""

    def __init__(self, function):
        self.function = function

    def transform(self, X):
        return self.function(X)
