"""Feature tables: their Parquet schema, what it says of its making, and reading them back.

A table is a folder of Parquet parts with a `manifest.json` that lists them. Each part carries, in
its schema metadata under the key ``mfeat``, the settings, the fingerprint and what each number is.
"""

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from mfeat import __version__, storage
from mfeat.plan import canonical_sha256
from mfeat.settings import resolve
from mfeat.transformer import MinkowskiCurves

#: Version of the layout of tables; raised when older software could misread one.
TABLE_VERSION = 1

MANIFEST = "manifest.json"
REJECTS = "rejects.parquet"
INPUTS = "inputs.arrow"
UNFINISHED = ".unfinished"

#: Columns that every table begins with, before those carried from a manifest and the features.
OWN_COLUMNS = (
    *("source", "row", "col", "height", "width", "valid_fraction"),
    *("label", "label_fraction", "group", "page"),
)

REJECTS_SCHEMA = pa.schema(
    [
        ("source", pa.string()),
        ("row", pa.int32()),
        ("col", pa.int32()),
        ("reason", pa.string()),
    ]
)

# Pitch of a transformer whose table has a pitch for every image.
_PER_IMAGE = "per image"

_KEY = b"mfeat"
_ROW_GROUP_BYTES = 16 << 20
_ROW_GROUP_ROWS = 8192


def transformer_record(transformer: MinkowskiCurves, per_image_pitch: bool) -> dict[str, Any]:
    """Return a transformer in types that JSON knows, so that `restored` makes it again."""
    parameters = {name: _plain(value) for name, value in transformer.get_params().items()}
    if per_image_pitch:
        parameters["pitch"] = _PER_IMAGE
    learned = getattr(transformer, "levels_", None)
    return {
        "parameters": parameters,
        "learned_levels": None if learned is None else {k: v.tolist() for k, v in learned.items()},
    }


def restored(record: dict[str, Any]) -> MinkowskiCurves:
    """Return the transformer of a record."""
    transformer = MinkowskiCurves(**record["parameters"])
    if record["learned_levels"] is not None:
        learned = record["learned_levels"].items()
        transformer.levels_ = {key: np.array(values) for key, values in learned}
        transformer._fitted_plan = resolve(transformer)
    return transformer


def _plain(value: Any) -> Any:
    if isinstance(value, np.ndarray | np.generic):
        return value.tolist()
    if isinstance(value, tuple | list):
        return [_plain(one) for one in value]
    if isinstance(value, dict):
        return {key: _plain(one) for key, one in value.items()}
    return value


def table_settings(
    transformer: MinkowskiCurves, per_image_pitch: bool, channel: str | int, unit: str | None
) -> dict[str, Any]:
    """Return all that the numbers of a table depend on: what tables to be combined must share."""
    vector = transformer.settings()
    if per_image_pitch:
        vector["pitch"] = _PER_IMAGE
    return {"vector": vector, "channel": channel, "unit": unit}


def table_schema(
    transformer: MinkowskiCurves,
    settings: dict[str, Any],
    per_image_pitch: bool,
    label: pa.DataType,
    carried: Sequence[pa.Field],
) -> pa.Schema:
    """Return the schema of a table, fixed before its first row.

    Raises
    ------
    ValueError
        If a carried column has the name of another one.
    """
    kinds = {
        "source": pa.string(), "row": pa.int32(), "col": pa.int32(), "height": pa.int32(),
        "width": pa.int32(), "valid_fraction": pa.float64(), "label": label,
        "label_fraction": pa.float64(), "group": pa.string(), "page": pa.int32(),
    }  # fmt: skip
    features = transformer.feature_table()
    number = pa.float32() if transformer.dtype == "float32" else pa.float64()
    taken = {*OWN_COLUMNS, *(feature.name for feature in features)}
    clash = [field.name for field in carried if field.name in taken]
    if clash:
        raise ValueError(
            f"the manifest's columns {clash} have names that the table uses itself; rename them"
        )
    about = {
        "format": "mfeat feature table",
        "table_version": TABLE_VERSION,
        "mfeat_version": __version__,
        "fingerprint": canonical_sha256(settings["vector"]),
        "settings": settings,
        "transformer": transformer_record(transformer, per_image_pitch),
        "features": [feature._asdict() for feature in features],
    }
    fields = [pa.field(name, kinds[name]) for name in OWN_COLUMNS]
    fields += carried
    fields += [pa.field(feature.name, number, nullable=False) for feature in features]
    return pa.schema(fields, {_KEY: json.dumps(about, sort_keys=True).encode()})


def about(schema: pa.Schema) -> dict[str, Any]:
    """Return what a table's schema says of its making.

    Raises
    ------
    ValueError
        If it is no feature table, or one of a later version.
    """
    metadata = schema.metadata or {}
    if _KEY not in metadata:
        raise ValueError("it is no feature table: its schema has no metadata of that kind")
    found = json.loads(metadata[_KEY])
    _check_version(found)
    return found


def _check_version(found: dict[str, Any]) -> None:
    if found["table_version"] > TABLE_VERSION:
        raise ValueError(
            f"the table was written by mfeat {found['mfeat_version']}, this is {__version__}; "
            "update mfeat to read it"
        )


class PartWriter:
    """Writes rows of a table to a stream, a row group at a time, so that memory stays bounded."""

    def __init__(self, stream: BinaryIO, schema: pa.Schema):
        features = [feature["name"] for feature in about(schema)["features"]]
        own = [name for name in schema.names if name not in set(features)]
        self._schema = schema
        width = 4 if schema.field(features[0]).type == pa.float32() else 8
        self._own = own
        fitting = _ROW_GROUP_BYTES // (width * len(features))
        self.row_group = max(1, min(_ROW_GROUP_ROWS, fitting))
        self._waiting: list[pa.RecordBatch] = []
        self._n_waiting = 0
        self.rows = 0
        # Bytes over those of the bare numbers, from 2560 vectors of 40 photographed surfaces:
        # plain zstd .62, byte-stream split .69, dictionaries .66 (at 1024 rows a group .68, .72,
        # .75), because areas repeat. Statistics of features would fill the footer for no query.
        self._writer = pq.ParquetWriter(
            stream,
            schema,
            compression="zstd",
            use_dictionary=own,
            write_statistics=own,
            write_page_checksum=True,
        )

    def add(self, own: dict[str, Any], rows: np.ndarray) -> None:
        """Add rows: columns by name, and the features as an array (n, features)."""
        columns = [_column(own[name], self._schema.field(name).type) for name in self._own]
        turned = np.ascontiguousarray(rows.T)
        columns += [pa.array(column) for column in turned]
        self._waiting.append(pa.RecordBatch.from_arrays(columns, schema=self._schema))
        self._n_waiting += len(rows)
        self.rows += len(rows)
        if self._n_waiting >= self.row_group:
            self._flush()

    def _flush(self) -> None:
        if self._waiting:
            self._writer.write_table(pa.Table.from_batches(self._waiting), self.row_group)
        self._waiting, self._n_waiting = [], 0

    def __enter__(self) -> "PartWriter":
        return self

    def __exit__(self, kind: Any, *_: Any) -> None:
        """Write what waits, and the footer; after an error, let go of the stream."""
        try:
            if kind is None:
                self._flush()
                self._writer.close()
        finally:
            self._writer.is_open = False  # else it would try again when it is collected


def _column(values: Any, kind: pa.DataType) -> pa.Array:
    if isinstance(values, pa.ChunkedArray):
        return values.combine_chunks()
    return pa.array(values, kind)


def differences(one: Any, other: Any, name: str = "") -> list[str]:
    """Return where two nested settings differ, one line each, e.g. "levels.raw: 16 -> 32".

    Examples
    --------
    >>> from mfeat.table import differences
    >>> differences({"size": 64, "raw": True}, {"size": 32, "raw": True})
    ['size: 64 -> 32']
    """
    if isinstance(one, dict) and isinstance(other, dict):
        keys = [*one, *(key for key in other if key not in one)]
        found = []
        for key in keys:
            place = f"{name}.{key}" if name else str(key)
            found += differences(one.get(key, "none"), other.get(key, "none"), place)
        return found
    return [] if one == other else [f"{name}: {_brief(one)} -> {_brief(other)}"]


def _brief(value: Any) -> str:
    text = json.dumps(value)
    return text if len(text) <= 60 else f"{text[:40]} ... ({len(text)} characters)"


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

    def labelled(self) -> "FeatureTable":
        """Return the rows that have a label."""
        if self.y is None:
            raise ValueError("the table has no label; name a source of labels when dumping it")
        return self[~np.array([label is None for label in self.y])]

    def __getitem__(self, rows: Any) -> "FeatureTable":
        """Return some rows: a boolean array, positions, or a slice."""
        chosen = np.arange(len(self))[rows]
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
    >>> table.X.shape, table.y, list(table.groups[:2])
    ((4, 395), None, ['noise.npy', 'noise.npy'])
    """
    if isinstance(path, list | tuple):
        if not path:
            raise ValueError("path is an empty list; give one folder or more")
        places = [storage.as_location(one, f"path[{k}]") for k, one in enumerate(path)]
    else:
        places = [storage.as_location(path, "path")]
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
    y = None if label.null_count == len(label) else _array(label)
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
    except pa.ArrowInvalid as error:
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
        with self._store.open(MANIFEST) as stream:
            manifest = json.loads(stream.read())
        _check_version(manifest)
        self._parts = manifest["parts"]
        self.rows = manifest["rows"]
        with self._part(self._parts[0]) as stream:
            self.about = about(pq.read_schema(stream))

    def _part(self, part: dict[str, Any]) -> BinaryIO:
        try:
            return self._store.open(part["name"])
        except FileNotFoundError:
            raise ValueError(
                f"{self.place} lacks {part['name']}, which its manifest lists; dump it anew with "
                "--fresh"
            ) from None

    def batches(self):
        """Yield the rows of all parts; each part must be the one that the manifest lists."""
        for part in self._parts:
            with self._part(part) as stream:
                file = pq.ParquetFile(stream, page_checksum_verification=True)
                found = about(file.schema_arrow)["fingerprint"]
                count = file.metadata.num_rows
                if found != self.about["fingerprint"] or count != part["rows"]:
                    raise ValueError(
                        f"{self.place}/{part['name']} is not the part that the manifest lists: "
                        f"{count} rows instead of {part['rows']}, or other settings"
                    )
                if count == 0:
                    yield from file.read().combine_chunks().to_batches() or [
                        pa.RecordBatch.from_pylist([], schema=file.schema_arrow)
                    ]
                yield from file.iter_batches(_ROW_GROUP_ROWS)
