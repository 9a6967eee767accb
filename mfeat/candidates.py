"""Who takes part in a comparison: descriptors by name, by import path, or as transformers."""

import importlib
from collections.abc import Mapping, Sequence
from typing import Any

from sklearn.base import BaseEstimator, clone
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.svm import SVC
from sklearn.utils import get_tags

from mfeat import _checks
from mfeat.descriptors import DESCRIPTORS
from mfeat.transformer import MinkowskiCurves

#: Our own vector's name among the candidates.
OWN = "minkowski"


def lda() -> BaseEstimator:
    """Return linear discriminant analysis with a covariance shrunk towards the identity.

    Source of the amount: O. Ledoit and M. Wolf, A well-conditioned estimator for large-dimensional
    covariance matrices, J. Multivariate Analysis 88 (2004), 365-411.
    """
    return make_pipeline(
        StandardScaler(), LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
    )


def svm() -> BaseEstimator:
    """Return a support vector machine with a Gaussian kernel, C = 10.

    Source: C. Cortes and V. Vapnik, Support-vector networks, Machine Learning 20 (1995), 273-297.
    The kernel's width follows from the number of features ("scale"), common practice.
    """
    return make_pipeline(StandardScaler(), SVC(C=10.0))


#: Classifiers by name.
CLASSIFIERS = {"lda": lda, "svm": svm}


def candidates_of(descriptors: Any, own: MinkowskiCurves) -> dict[str, Any]:
    """Return transformers by name.

    Parameters
    ----------
    descriptors : sequence of str, mapping of str to transformer, or None
        Names of `mfeat.descriptors.DESCRIPTORS`, "minkowski" for `own`, or import paths
        "package.module:name" of a transformer, or of a class or function that makes one without
        arguments. None: `own` and all known ones.
    own : MinkowskiCurves

    Raises
    ------
    ValueError, TypeError, ImportError
        With what was asked for, and the names that are known.
    """
    if descriptors is None:
        return {OWN: own} | {name: make() for name, make in DESCRIPTORS.items()}
    if isinstance(descriptors, Mapping):
        found = dict(descriptors)
        for name in found:
            if not isinstance(name, str) or not name:
                raise TypeError(f"names of descriptors must be text; got {name!r}")
            if name.startswith(f"{OWN}: "):
                raise ValueError(f"{name!r} is a name that variants of an ablation have; rename it")
    elif isinstance(descriptors, Sequence) and not isinstance(descriptors, str):
        if len(set(map(str, descriptors))) < len(descriptors):
            raise ValueError(f"descriptors holds a name twice: {list(descriptors)!r}")
        found = {str(name): _named(name, own) for name in descriptors}
    else:
        raise TypeError(
            f"descriptors must be a list of names or a dict of transformers; got {descriptors!r}"
        )
    if not found:
        raise ValueError(f"descriptors is empty; known are {_known()}")
    return {name: _checked(name, transformer) for name, transformer in found.items()}


def _known() -> str:
    return (
        f"{', '.join([OWN, *DESCRIPTORS])}, or an import path such as package.module:MyTransformer"
    )


def _named(name: Any, own: MinkowskiCurves) -> Any:
    if not isinstance(name, str):
        raise TypeError(
            f"a list of descriptors holds names; got {name!r}. Give transformers in a dict by name"
        )
    if name == OWN:
        return own
    if name in DESCRIPTORS:
        return DESCRIPTORS[name]()
    module, _, attribute = name.partition(":")
    if not module or not attribute or module.startswith("."):
        raise ValueError(f"there is no descriptor {name!r}; known are {_known()}")
    try:
        imported = importlib.import_module(module)
    except ImportError as error:
        raise ImportError(
            f"descriptor {name!r}: module {module!r} cannot be imported ({error}); it must be "
            "installed, or lie in the current folder"
        ) from error
    try:
        found = getattr(imported, attribute)
    except AttributeError:
        raise ValueError(
            f"descriptor {name!r}: module {module!r} has no attribute {attribute!r}"
        ) from None
    if isinstance(found, type) or not hasattr(found, "transform"):
        if not callable(found):
            raise TypeError(f"descriptor {name!r} is {found!r}, no transformer")
        try:
            found = found()
        except TypeError as error:
            raise TypeError(
                f"descriptor {name!r} cannot be made without arguments ({error}); give a function "
                "that makes it"
            ) from error
    return found


def _checked(name: str, transformer: Any) -> Any:
    missing = [m for m in ("fit", "transform", "get_params") if not hasattr(transformer, m)]
    if missing or isinstance(transformer, type):
        raise TypeError(
            f"descriptor {name!r} must be a scikit-learn transformer; {transformer!r} has no "
            f"{', '.join(missing) or 'instance'}"
        )
    return transformer


def learns(transformer: Any) -> bool:
    """Tell whether a transformer must be fitted on each training set anew.

    By scikit-learn's tag `requires_fit`, which is true unless a transformer says otherwise.
    """
    if isinstance(transformer, MinkowskiCurves):
        return transformer.level_rule == "fitted"
    if not hasattr(transformer, "__sklearn_tags__"):
        return True
    return bool(get_tags(transformer).requires_fit)


def prepared(transformer: Any, missing: bool) -> Any:
    """Return a copy that can take patches with missing pixels, if its settings allow for them.

    Ours marks patches with too few valid pixels by NaN; the other descriptors of this package take
    the nearest valid pixel, because they have no notion of a missing one.
    """
    copy = clone(transformer)
    known = copy.get_params(deep=False)
    own = {"n_jobs": 1} if "n_jobs" in known else {}
    if isinstance(copy, MinkowskiCurves):
        own["below_min_valid"] = "nan"
    elif missing and type(copy) in DESCRIPTORS.values():
        own["missing"] = "nearest"
    return copy.set_params(**own)


def classifiers_of(names: Any) -> dict[str, Any]:
    """Return classifiers by name, from names or a mapping of classifiers.

    Examples
    --------
    >>> from mfeat.candidates import classifiers_of
    >>> list(classifiers_of(["svm"]))
    ['svm']
    """
    if isinstance(names, Mapping):
        found = dict(names)
    elif isinstance(names, str) or not isinstance(names, Sequence):
        raise TypeError(f"classifiers must be a list of names, or a dict; got {names!r}")
    else:
        if len(set(map(str, names))) < len(names):
            raise ValueError(f"classifiers holds a name twice: {list(names)!r}")
        found = {
            name: CLASSIFIERS[_checks.choice("classifiers", name, tuple(CLASSIFIERS))]()
            for name in names
        }
    if not found:
        raise ValueError(f"classifiers is empty; known are {', '.join(CLASSIFIERS)}")
    for name, one in found.items():
        if not isinstance(name, str) or not name:
            raise TypeError(f"names of classifiers must be text; got {name!r}")
        needed = ("fit", "predict", "get_params")
        if isinstance(one, type) or not all(hasattr(one, method) for method in needed):
            raise TypeError(f"classifier {name!r} must be a scikit-learn classifier; got {one!r}")
    return found
