"""Parquet drive tables: list columns `depth_m` and `rgb`, the description in the metadata.

The metadata value `learnfilter` holds the description as JSON; files of other tools may say the
same members as plain metadata keys.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from numpy.typing import NDArray

from learnfilter.core.errors import DriveError
from learnfilter.drives.columns import LISTS, Columns, Table
from learnfilter.drives.description import MEMBERS, parse_description


def open_parquet(path: Path) -> Table:
    """Look at schema and description; raises DriveError where they are damaged."""
    try:
        schema = pq.read_schema(path)
    except (pa.ArrowException, OSError) as error:
        raise DriveError(f"not a readable Parquet file ({error})", file=path) from error

    def batches(batch_rows: int, names: Sequence[str]) -> Iterator[Columns]:
        widths: dict[str, int] = {}
        row = 0
        try:
            with pq.ParquetFile(path) as file:
                for batch in filter(len, file.iter_batches(batch_rows, columns=list(names))):
                    yield {name: _array(batch.column(name), name, widths, row, path) for name in names}
                    row += len(batch)
        except (pa.ArrowException, OSError) as error:
            raise DriveError(
                f"damaged Parquet file ({error})", file=path, place=f"after row {row}"
            ) from error

    return Table(_members(schema.metadata or {}, path), schema.names, batches)


def _members(metadata: dict[bytes, bytes], path: Path) -> dict[str, Any]:
    """Our JSON where it is, else plain keys, as other tools write them."""
    if b"learnfilter" in metadata:
        return parse_description(metadata[b"learnfilter"], path)
    members: dict[str, Any] = {}
    for key in MEMBERS & {key.decode(errors="replace") for key in metadata}:
        text = metadata[key.encode()].decode(errors="replace")
        try:
            members[key] = json.loads(text)
        except ValueError:
            members[key] = text
    return members


def _array(column: pa.Array, name: str, widths: dict[str, int], row: int, path: Path) -> NDArray:
    """[t] float64, or [t w] float32 for the lists; `widths` holds each list to its first length."""
    wanted = pa.list_(pa.float32()) if name in LISTS else pa.float64()
    try:
        column = column.cast(wanted, safe=False)
    except pa.ArrowException as error:
        raise DriveError(
            "column of another type", file=path, place=f"column {name}", expected=wanted, got=column.type
        ) from error
    if name not in LISTS:
        return column.to_numpy(zero_copy_only=False)
    lengths = pc.list_value_length(column).fill_null(0).to_numpy()
    width = widths.setdefault(name, max(1, int(lengths[0])))
    uneven = np.flatnonzero(lengths != width)
    if uneven.size:
        raise DriveError(
            "list of another length",
            file=path,
            place=f"row {row + uneven[0]}, column {name}",
            expected=f"{width} values in every row",
            got=lengths[uneven[0]],
        )
    return column.flatten().to_numpy(zero_copy_only=False).reshape(-1, width)


def write_parquet(path: Path, columns: Columns, members: dict[str, Any]) -> None:
    """Write checked columns, with the description as JSON in the metadata."""

    def arrow(array: NDArray) -> pa.Array:
        if array.ndim == 1:
            return pa.array(array)
        ends = np.arange(len(array) + 1, dtype=np.int32) * array.shape[1]
        return pa.ListArray.from_arrays(pa.array(ends), pa.array(array.ravel()))

    table = pa.table({name: arrow(array) for name, array in columns.items()})
    text = json.dumps(members, sort_keys=True, allow_nan=False)
    pq.write_table(table.replace_schema_metadata({"learnfilter": text}), path, compression="zstd")
