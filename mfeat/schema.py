"""What a feature table looks like on disk: files, columns, schema, and what it says of its making.

A table is a folder of Parquet parts with a `manifest.json` that lists them. Each part carries, in
its schema metadata under the key ``mfeat``, the settings, the fingerprint and what each number is.
"""

import json
from collections.abc import Sequence
from typing import Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from mfeat import __version__
from mfeat.plan import canonical_sha256
from mfeat.settings import resolve
from mfeat.transformer import MinkowskiCurves, full_curves

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
_ROW_GROUP_BYTES = 64 << 20
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


def per_image_pitch(record: dict[str, Any]) -> bool:
    """Tell whether a transformer's record leaves the pitch to each image."""
    return record["parameters"]["pitch"] == _PER_IMAGE


def restored(record: dict[str, Any]) -> MinkowskiCurves:
    """Return the transformer of a record.

    Tables from before some parameter existed hold whole curves: `full_curves` has its old sense.
    """
    transformer = MinkowskiCurves(**(full_curves() | record["parameters"]))
    if record["learned_levels"] is not None:
        learned = record["learned_levels"].items()
        transformer.levels_ = {key: np.array(values) for key, values in learned}
        transformer._fitted_plan = resolve(transformer)
    return transformer


def _plain(value: Any) -> Any:
    if isinstance(value, np.ndarray | np.generic):
        return value.tolist()
    if isinstance(value, tuple | list | range):
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
    check_version(found)
    return found


def check_version(found: dict[str, Any]) -> None:
    """Refuse a table of a later version, which could be misread."""
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
