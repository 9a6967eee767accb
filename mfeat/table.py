"""Reading feature tables back, for scikit-learn."""

import contextlib
import json
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from mfeat import locations, storage
from mfeat.schema import MANIFEST, UNFINISHED, about, check_version, differences, restored
from mfeat.transformer import MinkowskiCurves

_ROWS_AT_ONCE = 8192


@dataclass(frozen=True, eq=False)
class FeatureTable:
    """A feature table in memory, ready for scikit-learn.

    Attributes
    ----------
    X : ndarray of shape (n, n_features), float32 or float64
        One row a patch.
    y : ndarray of shape (n,), or None
        Labels; None where the table has no label at all, and None in it for patches without one.
    groups : ndarray of shape (n,)
        The group of each patch; its source where none was given, so that patches of one image
        never stand on both sides of a grouped split.
    names : list of str
        Names of the features.
    columns : pyarrow.Table
        All columns but the features: source, position, labels, carried ones.
    transformer : MinkowskiCurves
        Makes the same vectors of new patches. Where the images had different pitches its `pitch`
        is the text "per image": set it before use.
    settings : dict
        All that the numbers depend on: of the vector, the channel of colours, the unit of pitch.
    fingerprint : str
        SHA-256 of the settings of the vector, as `MinkowskiCurves.fingerprint` gives it.
    """

    X: np.ndarray
    y: np.ndarray | None
    groups: np.ndarray
    names: list[str]
    columns: pa.Table
    transformer: MinkowskiCurves
    settings: dict[str, Any]
    fingerprint: str

    def __len__(self) -> int:
        return len(self.X)

    def __repr__(self) -> str:
        labels = "no" if self.y is None else len(set(self.y) - {None})
        return (
            f"FeatureTable({len(self)} patches, {len(self.names)} numbers, {labels} labels, "
            f"{len(set(self.groups))} groups, {self.fingerprint[:12]})"
        )

    def labelled(self) -> "FeatureTable":
        """Return the rows that have a label."""
        if self.y is None:
            raise ValueError("the table has no label; name a source of labels when dumping it")
        found = self[self.columns["label"].is_valid().to_numpy()]
        return replace(found, y=_array(found.columns["label"]))

    def __getitem__(self, rows: Any) -> "FeatureTable":
        """Return some rows: a boolean array, positions, or a slice."""
        chosen = np.atleast_1d(np.arange(len(self))[rows])
        return FeatureTable(
            X=self.X[chosen],
            y=None if self.y is None else self.y[chosen],
            groups=self.groups[chosen],
            names=self.names,
            columns=self.columns.take(pa.array(chosen)),
            transformer=self.transformer,
            settings=self.settings,
            fingerprint=self.fingerprint,
        )


def read_table(path: Any) -> FeatureTable:
    """Read a feature table, or several with equal settings as one.

    Parameters
    ----------
    path : path-like, str, or list of them
        Folders written by `dump`, local or fsspec URIs.

    Returns
    -------
    FeatureTable
        With X, y, groups, names, and the transformer that made it.

    Raises
    ------
    FileNotFoundError
        If there is no complete table.
    ValueError
        If parts are missing or changed, or tables of different settings are to be combined; the
        differing settings are shown.

    Examples
    --------
    >>> import tempfile, numpy as np
    >>> from mfeat import dump, read_table
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     np.save(f"{folder}/noise.npy", np.random.default_rng(0).normal(size=(128, 128)))
    ...     summary = dump(f"{folder}/noise.npy", f"{folder}/table", jobs=1)
    ...     table = read_table(f"{folder}/table")
    >>> len(table.X), table.y, list(table.groups[:2])
    (4, None, ['noise.npy', 'noise.npy'])
    """
    if isinstance(path, list | tuple):
        if not path:
            raise ValueError("path is an empty list; give one folder or more")
        places = [locations.as_location(one, f"path[{k}]") for k, one in enumerate(path)]
    else:
        places = [locations.as_location(path, "path")]
    opened = [_open_table(place) for place in places]
    first = opened[0].about
    for one in opened[1:]:
        if one.about["settings"] != first["settings"]:
            lines = "\n  ".join(differences(first["settings"], one.about["settings"]))
            raise ValueError(
                f"tables of different settings cannot be combined; {places[0]} -> {one.place}:\n"
                f"  {lines}"
            )
    names = [feature["name"] for feature in first["features"]]
    count = sum(one.rows for one in opened)
    X = np.empty((count, len(names)), dtype=first["settings"]["vector"]["dtype"])
    others, start = [], 0
    for one in opened:
        for batch in one.batches():
            stop = start + batch.num_rows
            for k, name in enumerate(names):
                X[start:stop, k] = batch[name].to_numpy()
            others.append(pa.Table.from_batches([batch.drop_columns(names)]))
            start = stop
    columns = _together(others, places)
    groups = columns["group"].combine_chunks().fill_null(columns["source"].combine_chunks())
    label = columns["label"]
    if label.null_count == len(label):
        y = None
    elif label.null_count:  # numbers would become floating-point ones, with NaN
        y = np.array(label.to_pylist(), dtype=object)
    else:
        y = _array(label)
    return FeatureTable(
        X, y, _array(groups), names, columns,
        restored(first["transformer"]), first["settings"], first["fingerprint"],
    )  # fmt: skip


def _array(column: Any) -> np.ndarray:
    """Return a column as an array: numbers as such, text as objects."""
    return column.to_numpy(zero_copy_only=False) if isinstance(column, pa.Array) else (
        column.to_numpy()
    )  # fmt: skip


def _together(tables: list[pa.Table], places: list[str]) -> pa.Table:
    try:
        return pa.concat_tables(tables, promote_options="default").replace_schema_metadata(None)
    except (pa.ArrowInvalid, pa.ArrowTypeError) as error:
        raise ValueError(
            f"the other columns of {', '.join(places)} do not go together: {error}"
        ) from None


class _open_table:
    """A complete table on storage: what it says of itself, and its rows part by part."""

    def __init__(self, place: str):
        self.place = place
        self._store = storage.output(place)
        if not self._store.exists(MANIFEST):
            unfinished = self._store.exists(UNFINISHED)
            why = "its dump is unfinished; run the same command again to resume it"
            raise FileNotFoundError(
                f"{place} holds no complete feature table"
                + (f": {why}" if unfinished else "; dump writes one")
            )
        self._stamp = locations.stamp(f"{place}/{MANIFEST}")
        with self._store.open(MANIFEST) as stream:
            manifest = json.loads(stream.read())
        check_version(manifest)
        self._parts = manifest["parts"]
        self.rows = manifest["rows"]
        with self._part(self._parts[0]) as stream:
            self.about = about(pq.read_schema(stream))

    @contextlib.contextmanager
    def _part(self, part: dict[str, Any]) -> Iterator[BinaryIO]:
        """Open a part; whatever is wrong with it is said with its name."""
        try:
            with self._store.open(part["name"]) as stream:
                yield stream
        except FileNotFoundError:
            raise ValueError(
                f"{self.place} lacks {part['name']}, which its manifest lists; dump it anew with "
                "--fresh"
            ) from None
        except (OSError, ValueError) as error:  # Arrow's errors are among them
            raise ValueError(
                f"{self.place}/{part['name']} is not the part that the manifest lists: {error}"
            ) from error

    def batches(self) -> Iterator[pa.RecordBatch]:
        """Yield the rows of all parts; each part must be the one that the manifest lists."""
        for part in self._parts:
            with self._part(part) as stream:
                file = pq.ParquetFile(stream, page_checksum_verification=True)
                found = about(file.schema_arrow)["fingerprint"]
                count = file.metadata.num_rows
                if found != self.about["fingerprint"] or count != part["rows"]:
                    raise ValueError(f"{count} rows instead of {part['rows']}, or other settings")
                if count == 0:
                    yield from file.read().combine_chunks().to_batches() or [
                        pa.RecordBatch.from_pylist([], schema=file.schema_arrow)
                    ]
                yield from file.iter_batches(_ROWS_AT_ONCE)
        if not self._store.exists(MANIFEST) or (
            locations.stamp(f"{self.place}/{MANIFEST}") != self._stamp
        ):
            raise ValueError(f"{self.place} was written anew while it was read; read it again")
