"""One arrow table from the columns of many solves, built once per chunk: most text columns repeat few texts."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from lmpgap.runs.schema import RunTable
from lmpgap.scenario.network import IntArray


@dataclass(frozen=True)
class Labels:
    """A text column as positions in a list of texts.

    Attributes
    ----------
    texts
        Passed as one object by all solves of a chunk, it is turned into arrow once.
    position : (n_row,)
    """

    texts: Sequence[str]
    position: IntArray

    def __len__(self) -> int:
        return self.position.size


Column = Labels | np.ndarray[Any, Any] | Sequence[Any] | str | np.datetime64
"""Arrays and lists hold one entry per row; a text or a time stands for the same in every row."""
Columns = Mapping[str, Column]


def assemble(table: RunTable, parts: Sequence[Columns]) -> pa.Table:
    """Return the table with the rows of all parts, one part after the other.

    Parameters
    ----------
    parts
        Columns by name; at least one of each part has one entry per row. Times are the same for a whole part.
    """
    if not parts:
        return table.arrow_schema.empty_table()
    sizes = [_size(part) for part in parts]
    pools: dict[int, pa.Array] = {}
    arrays = []
    for column in table.columns:
        pieces = [part[column.name] for part in parts]
        if column.type == "text":
            arrays.append(_text(pieces, sizes, pools))
        elif column.type == "time":
            stamps = np.repeat(np.array(pieces, dtype="datetime64[us]"), sizes)
            arrays.append(pa.array(stamps).cast(table.arrow_schema.field(column.name).type))
        else:
            dtype = bool if column.type == "flag" else np.float64
            values = [np.asarray(piece, dtype=dtype) for piece in pieces]
            arrays.append(pa.array(np.concatenate(values)))
    return pa.table(arrays, schema=table.arrow_schema)


def _size(part: Columns) -> int:
    return next(len(column) for column in part.values() if not isinstance(column, str | np.datetime64))


def _text(pieces: Sequence[Column], sizes: Sequence[int], pools: dict[int, pa.Array]) -> pa.Array:
    arrays = []
    for piece, size in zip(pieces, sizes, strict=True):
        if isinstance(piece, str):
            arrays.append(pa.repeat(piece, size))
        elif isinstance(piece, Labels):
            key = id(piece.texts)
            if key not in pools:
                pools[key] = pa.array(piece.texts, type=pa.string())
            arrays.append(pools[key].take(pa.array(piece.position)))
        else:
            arrays.append(pa.array(piece, type=pa.string()))
    return pa.concat_arrays(arrays)
