"""What a dump does: its settings, checked, from arguments or a TOML file, and printed back."""

import ast
import contextlib
import json
import math
import tomllib
from dataclasses import dataclass
from typing import Any

import numpy as np

from mfeat import _checks, locations
from mfeat.basis import LEVEL_RANGE
from mfeat.images import MAX_PIXELS, check_channel
from mfeat.levels import DEFAULT_RANGES
from mfeat.patches import LABEL_RULES, PatchGrid
from mfeat.schema import transformer_record
from mfeat.transformer import MinkowskiCurves

REGIONS = ("patch", "grid")
LABELS_FROM = ("manifest", "folder", "truth")

#: Keys of a settings file besides the table [features] with parameters of `MinkowskiCurves`.
KEYS = (
    *("size", "stride", "edge", "regions", "label_from", "truth_rule", "channel"),
    *("missing_value", "max_pixels", "jobs", "backend"),
)


@dataclass(frozen=True)
class DumpSettings:
    """All that decides what a table holds; see `mfeat.dump` for each."""

    transformer: MinkowskiCurves
    grid: PatchGrid
    regions: str
    label_from: str | None
    truth_rule: str
    channel: str | int
    missing_value: float | None
    max_pixels: int

    def keywords(self) -> dict[str, Any]:
        """Return all but the transformer, as `dump_settings` takes it, in types that JSON knows."""
        return {
            "size": list(self.grid.size),
            "stride": list(self.grid.stride),
            "edge": self.grid.edge,
            "regions": self.regions,
            "label_from": self.label_from,
            "truth_rule": self.truth_rule,
            "channel": self.channel,
            "missing_value": self.missing_value,
            "max_pixels": self.max_pixels,
        }

    def record(self) -> dict[str, Any]:
        """Return all settings in types that JSON knows, to compare those of two runs."""
        return self.keywords() | {"features": self.transformer.settings()}

    def toml(self) -> str:
        """Return the settings as a TOML file that `read_settings` reads.

        Examples
        --------
        >>> from mfeat.options import dump_settings
        >>> print(dump_settings(size=32).toml()[:30])
        size = [32, 32]
        edge = "drop"
        """
        own = self.keywords()
        if own["stride"] == own["size"]:
            del own["stride"]  # it follows the size, also when a flag sets another
        lines = [f"{key} = {_toml(own[key])}" for key in KEYS if own.get(key) is not None]
        lines += ["", "[features]"]
        if self.transformer.level_rule == "fitted":
            lines.append("# learned levels are not among these; give the fitted transformer itself")
        features = transformer_record(self.transformer, False)["parameters"] | {"n_jobs": None}
        if isinstance(features["level_range"], dict):
            features["level_range"] = _ranges_in_use(**features)
        lines += [f"{key} = {_toml(value)}" for key, value in features.items() if value is not None]
        return "\n".join(lines) + "\n"


def dump_settings(
    transformer: Any = None,
    *,
    size: Any = 64,
    stride: Any = None,
    edge: str = "drop",
    regions: str = "patch",
    label_from: str | None = None,
    truth_rule: str = "majority",
    channel: str | int = "luminance",
    missing_value: float | None = None,
    max_pixels: int = MAX_PIXELS,
) -> DumpSettings:
    """Return the settings of a dump after checking each; they are parameters of `mfeat.dump`.

    Raises
    ------
    ValueError, TypeError
        Naming the parameter, what was given and what is legal.
    """
    if transformer is None:
        transformer = MinkowskiCurves()
    if not isinstance(transformer, MinkowskiCurves):
        raise TypeError(f"transformer must be a MinkowskiCurves; got {transformer!r}")
    if transformer.channels is not None:
        raise ValueError(
            "transformer has channels, but dump reads one channel of an image; use channel="
        )
    transformer.settings()  # checks every parameter; with rule "fitted", that it is fitted
    if label_from is not None:
        _checks.choice("label_from", label_from, LABELS_FROM)
    if missing_value is not None:
        missing_value = _checks.real("missing_value", missing_value)
    return DumpSettings(
        transformer=transformer,
        grid=PatchGrid(size, stride, edge=edge),
        regions=_checks.choice("regions", regions, REGIONS),
        label_from=label_from,
        truth_rule=_checks.choice("truth_rule", truth_rule, LABEL_RULES),
        channel=check_channel(channel),
        missing_value=missing_value,
        max_pixels=_checks.integer("max_pixels", max_pixels, minimum=4),
    )


def _ranges_in_use(
    levels: Any, level_rule: str, level_range: dict[str, Any], basis: str, **_: Any
) -> dict[str, Any]:
    """Return the ranges of families whose levels are a number; TOML has no word for None."""
    counts = levels if isinstance(levels, dict) else dict.fromkeys(level_range, levels)
    default = list(LEVEL_RANGE if basis == "hermite" else DEFAULT_RANGES.get(level_rule, ()))
    return {
        family: default if given is None else given
        for family, given in level_range.items()
        if isinstance(counts.get(family), int | float)
    }


def _toml(value: Any) -> str:
    """Return a value as TOML; text, numbers, booleans and lists are written as in JSON."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {_toml(one)}" for key, one in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(_toml(one) for one in value) + "]"
    if isinstance(value, float):
        return repr(value)
    return json.dumps(value, ensure_ascii=False)


def read_settings(path: Any) -> dict[str, Any]:
    r"""Read a settings file: keyword arguments of `mfeat.dump`, `transformer` among them.

    Parameters
    ----------
    path : path-like or str
        A TOML file with the keys size, stride, edge, regions, label_from, truth_rule, channel,
        missing_value, max_pixels, jobs and backend, each optional, and a table [features] of
        parameters of `MinkowskiCurves`.

    Returns
    -------
    dict

    Raises
    ------
    ValueError
        If it is not TOML, or has a key that is unknown.

    Examples
    --------
    >>> import tempfile
    >>> from pathlib import Path
    >>> from mfeat.options import read_settings
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     file = Path(folder) / "dump.toml"
    ...     _ = file.write_text("size = 128\n[features]\nlevels = 8\n")
    ...     read_settings(file)
    {'size': 128, 'transformer': MinkowskiCurves(levels=8)}
    """
    place = locations.as_location(path, "settings")
    with locations.open_input(place) as stream:
        try:
            found = tomllib.loads(stream.read().decode("utf-8-sig"))
        except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
            raise ValueError(f"settings {place} are not TOML: {error}") from None
    features = found.pop("features", None)
    unknown = [key for key in found if key not in KEYS]
    if unknown:
        raise ValueError(
            f"settings {place} have unknown keys {unknown}; known are {', '.join(KEYS)} and the "
            "table [features]"
        )
    if features is not None:
        found["transformer"] = with_features(MinkowskiCurves(), features, f"settings {place}")
    return found


def feature_value(text: str) -> tuple[str, Any]:
    """Return name and value of "NAME=VALUE", the value in TOML syntax.

    Examples
    --------
    >>> from mfeat.options import feature_value
    >>> feature_value("smooth=[1, 2.5]"), feature_value("level_rule=rank")
    (('smooth', [1, 2.5]), ('level_rule', 'rank'))
    """
    name, equals, value = text.partition("=")
    if not equals or not name.strip():
        raise ValueError(f"{text!r} is not NAME=VALUE, e.g. levels=32 or 'smooth=[1, 2]'")
    try:
        found = tomllib.loads(f"value = {value}")
    except tomllib.TOMLDecodeError:
        found = {}
    single = found.get("value")
    if not found and value.strip() in ("True", "False"):
        single, found = value.strip() == "True", {"value": None}
    if not found and value.strip().startswith("("):  # tuples, as the documentation writes them
        with contextlib.suppress(ValueError, SyntaxError):
            single, found = list(ast.literal_eval(value.strip())), {"value": None}
    if list(found) != ["value"] or (isinstance(single, float) and not math.isfinite(single)):
        return name.strip(), value.strip()  # text without quotes, such as rank or nan
    return name.strip(), single


def with_features(transformer: MinkowskiCurves, features: Any, where: str) -> MinkowskiCurves:
    """Return a transformer with some parameters set by name."""
    known = transformer.get_params()
    if not isinstance(features, dict):
        raise ValueError(f"{where}: features must be a table of parameters; got {features!r}")
    unknown = [name for name in features if name not in known]
    if unknown:
        raise ValueError(
            f"{where}: MinkowskiCurves has no parameter {unknown}; it has {', '.join(known)}"
        )
    return MinkowskiCurves(**(known | features))


def uniform_pitch(settings: DumpSettings, pitch: np.ndarray) -> tuple[float, float] | None:
    """Return the one pitch (rows, columns) of all images, or None where they differ.

    `pitch` (n, 2) holds that of each image.

    Raises
    ------
    ValueError
        If the transformer has another pitch, set by the user; or learned levels, which hold for
        one pitch only.
    """
    own = _checks.pitch(settings.transformer.pitch)
    same = bool((pitch == pitch[0]).all())
    if own != (1.0, 1.0) and not (same and own == tuple(pitch[0])):
        raise ValueError(
            f"the transformer has pitch {own} (rows, columns), the manifest has pitches from "
            f"{tuple(pitch.min(axis=0).tolist())} to {tuple(pitch.max(axis=0).tolist())}; leave "
            "one of them out"
        )
    if not same and settings.transformer.level_rule == "fitted":
        raise ValueError(
            "images of different pitch cannot share learned levels; use another level_rule, or "
            "dump the images of each pitch apart"
        )
    return tuple(map(float, pitch[0])) if same else None
