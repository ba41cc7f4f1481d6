"""Files of a scenario folder as raw columns: CSV of several dialects, and Parquet.

Nothing outside the folder is ever read. A file that cannot be taken apart is a fault in words; the values
themselves are judged later, in `lmpgap.scenario.parse`.
"""

from __future__ import annotations

import codecs
import csv
import hashlib
import io
import stat
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv

from lmpgap.scenario.faults import FaultLog, clip_text, suggestion
from lmpgap.scenario.network import IntArray
from lmpgap.scenario.tables import TABLES
from lmpgap.scenario.typed import Lines, row_numbers

FORMATS = (".csv", ".parquet")
_DELIMITERS = {",": "commas", ";": "semicolons", "\t": "tabs"}


@dataclass(frozen=True)
class RawTable:
    """A file taken apart, values as they stand.

    Attributes
    ----------
    file
        File name.
    names
        Headers, trimmed.
    columns
        One Arrow array per header; text for CSV.
    lines
        Line numbers of rows.
    comma_decimals
        Decimals may be written with a comma (a CSV file that is not separated by commas).
    """

    file: str
    names: tuple[str, ...]
    columns: tuple[pa.Array, ...]
    lines: Lines
    comma_decimals: bool = False

    @property
    def n_row(self) -> int:
        """Number of rows."""
        return len(self.columns[0]) if self.columns else 0


def read_bytes(path: Path, folder: Path, log: FaultLog) -> bytes | None:
    """Return a file's content, or ``None`` with a fault when it is not a plain file inside the folder."""
    try:
        if not path.resolve().is_relative_to(folder.resolve()):
            log.fault(path.name, "is a link that leads outside the scenario folder; put the file itself there")
            return None
        if not stat.S_ISREG(path.stat().st_mode):
            log.fault(path.name, "is not a plain file")
            return None
        return path.read_bytes()
    except (OSError, RuntimeError) as error:
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        log.fault(path.name, f"cannot be read: {reason}")
        return None


def table_files(folder: Path, log: FaultLog) -> dict[str, Path]:
    """Return the file of each contract table that the folder holds; tell of files that look like tables."""
    found: dict[str, Path] = {}
    for path in sorted(folder.iterdir()):
        if path.suffix.lower() not in FORMATS:
            continue
        if path.stem not in TABLES or path.suffix not in FORMATS:
            hint = suggestion(path.stem, TABLES)
            message = "is not a table of a scenario folder and is not read" + hint
            if hint:
                log.fault(path.name, message, kind="unknown table")
            else:
                log.warn(path.name, message, kind="unknown table")
        elif path.stem in found:
            log.fault(path.name, f"is there beside {found[path.stem].name}: keep one of the two")
        else:
            found[path.stem] = path
    return found


def read_raw(path: Path, folder: Path, log: FaultLog, hashes: dict[str, str]) -> RawTable | None:
    """Return the raw columns of a table file, or ``None`` with a fault."""
    content = read_bytes(path, folder, log)
    if content is None:
        return None
    hashes[path.name] = hashlib.sha256(content).hexdigest()
    if path.suffix == ".parquet":
        return _read_parquet(path.name, content, log)
    text = decode(path.name, content, log)
    return None if text is None else _read_csv(path.name, text, log)


def decode(file: str, content: bytes, log: FaultLog) -> str | None:
    """Return the text of a file with plain line ends, or ``None`` with a fault."""
    encoding = "utf-8-sig"
    if content.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        encoding = "utf-16"
    try:
        text = content.decode(encoding)
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        log.fault(
            file,
            "is not UTF-8 text, so that names would be garbled",
            row=line,
            value=clip_text(content[max(0, error.start - 12) : error.start + 12].decode("latin-1")),
            allowed="UTF-8; save the file again with this encoding",
        )
        return None
    if "\0" in text:
        log.fault(file, "is not a text file: it contains zero bytes", row=text.count("\n", 0, text.index("\0")) + 1)
        return None
    return text.replace("\r\n", "\n").replace("\r", "\n") if "\r" in text else text


def _read_csv(file: str, text: str, log: FaultLog) -> RawTable | None:
    header_end = _header_end(text)
    if header_end is None:
        log.fault(file, "is empty: not even a header")
        return None
    header = text[:header_end].strip("\n")
    # Comma first: a header in the contract's own names decides, whatever stands in the rows.
    delimiter = max(_DELIMITERS, key=lambda mark: (header.count(mark), mark == ","))
    if '"' not in text:
        table = _read_plain(file, text, header_end, delimiter)
        if table is not None:
            return table
    return _read_quoted(file, text, delimiter, log)


def _header_end(text: str) -> int | None:
    """Return the position after the first line that is not blank."""
    start = 0
    while start < len(text):
        end = text.find("\n", start)
        end = len(text) if end < 0 else end
        if text[start:end].strip():
            return end
        start = end + 1
    return None


def _split_header(line: str, delimiter: str) -> tuple[str, ...]:
    return tuple(name.strip() for name in line.split(delimiter))


def _read_plain(file: str, text: str, header_end: int, delimiter: str) -> RawTable | None:
    """Read a file without quotes with Arrow; ``None`` where a row has another number of fields."""
    header = text[:header_end].split("\n")[-1]
    names = _split_header(header, delimiter)
    body = text[header_end + 1 :]
    labels = [f"c{i}" for i in range(len(names))]

    def lines(rows: IntArray) -> IntArray:
        filled = [number for number, line in enumerate(text.split("\n"), start=1) if _has_content(line, delimiter)]
        return np.asarray(filled[1:], dtype=np.int64)[rows]

    if not body.strip():
        empty = pa.array([], type=pa.string())
        return RawTable(file, names, (empty,) * len(names), lines, delimiter != ",")
    data = body.encode()
    try:
        table = pyarrow.csv.read_csv(
            pa.BufferReader(data),
            read_options=pyarrow.csv.ReadOptions(
                column_names=labels, use_threads=False, block_size=max(1 << 20, min(len(data) + 1, 1 << 27))
            ),
            parse_options=pyarrow.csv.ParseOptions(delimiter=delimiter, quote_char=False, double_quote=False),
            convert_options=pyarrow.csv.ConvertOptions(
                column_types=dict.fromkeys(labels, pa.string()), strings_can_be_null=False
            ),
        )
    except pa.ArrowInvalid:
        return None
    columns = [_one_array(table.column(label)) for label in labels]
    columns = _drop_empty_rows(columns)
    return RawTable(file, names, tuple(columns), lines, delimiter != ",")


def _has_content(line: str, delimiter: str) -> bool:
    return bool(line.replace(delimiter, "").strip())


def _drop_empty_rows(columns: list[pa.Array]) -> list[pa.Array]:
    """Leave out rows without any content, as spreadsheets write below the table."""
    import pyarrow.compute as pc

    # Most files have a full first column, which settles it at once.
    empty = pc.equal(pc.utf8_trim_whitespace(columns[0]), "")
    for column in columns[1:]:
        if not pc.any(empty).as_py():
            return columns
        empty = pc.and_(empty, pc.equal(pc.utf8_trim_whitespace(column), ""))
    if not pc.any(empty).as_py():
        return columns
    keep = pc.invert(empty)
    return [column.filter(keep) for column in columns]


def _read_quoted(file: str, text: str, delimiter: str, log: FaultLog) -> RawTable | None:
    """Read a file row by row: quotes, line breaks inside quotes, and rows of the wrong width."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    names: tuple[str, ...] = ()
    records: list[list[str]] = []
    numbers: list[int] = []
    narrow: list[tuple[int, int]] = []
    previous = 0
    try:
        for record in reader:
            line, previous = previous + 1, reader.line_num
            if not any(field.strip() for field in record):
                continue
            if not names:
                names = tuple(name.strip() for name in record)
            elif len(record) != len(names) and any(field.strip() for field in record[len(names) :] or ["x"]):
                narrow.append((line, len(record)))
            else:
                records.append(record[: len(names)])
                numbers.append(line)
    except csv.Error as error:
        reason = str(error)
        if "field larger" in reason or "unexpected end" in reason:
            reason = "a quote is opened and not closed"
        log.fault(file, f"cannot be taken apart: {reason}", row=previous + 1)
        return None
    for line, width in narrow[:1000]:
        log.fault(
            file,
            f"has {width} fields where the header has {len(names)}",
            row=line,
            allowed=f"{len(names)} fields separated by {_DELIMITERS[delimiter]}",
            kind="field count",
        )
    if len(narrow) > 1000:
        log.fault(file, f"and {len(narrow) - 1000:,} more rows with another number of fields", kind="field count")
    array = np.asarray(numbers, dtype=np.int64)
    columns = tuple(pa.array([record[i] for record in records], type=pa.string()) for i in range(len(names)))
    return RawTable(file, names, columns, lambda rows: array[rows], delimiter != ",")


def _read_parquet(file: str, content: bytes, log: FaultLog) -> RawTable | None:
    from pyarrow import parquet

    try:
        table = parquet.read_table(pa.BufferReader(content))
    except (pa.ArrowException, OSError, ValueError) as error:
        log.fault(file, f"is not a readable Parquet file: {clip_text(str(error).splitlines()[0])}")
        return None
    return table_from_arrow(file, table)


def table_from_arrow(file: str, table: pa.Table) -> RawTable:
    """Return an Arrow table as raw columns; the row numbers that pandas stores beside the columns are left out."""
    kept = [i for i, name in enumerate(table.column_names) if not name.startswith("__index_level_")]
    return RawTable(
        file,
        tuple(table.column_names[i].strip() for i in kept),
        tuple(_one_array(table.column(i)) for i in kept),
        row_numbers,
    )


def _one_array(column: pa.ChunkedArray) -> pa.Array:
    if column.num_chunks == 1:
        return column.chunk(0)
    combined = column.combine_chunks()
    return combined.chunk(0) if isinstance(combined, pa.ChunkedArray) else combined
