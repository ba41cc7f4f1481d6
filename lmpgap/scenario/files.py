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
from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from lmpgap.scenario.faults import FaultLog, clip_text, nearest
from lmpgap.scenario.network import IntArray
from lmpgap.scenario.tables import TABLES
from lmpgap.scenario.typed import Lines, RawColumn, TextColumn, row_numbers

if TYPE_CHECKING:
    from _csv import Reader

    import pyarrow as pa

FORMATS = (".csv", ".parquet")
_DELIMITERS = {",": "commas", ";": "semicolons", "\t": "tabs"}
_CHUNK = 50_000
"""Rows that are taken apart at a time: their texts are coded before the next ones are read, to save memory."""


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
        One per header; text for CSV.
    lines
        Line numbers of rows.
    comma_decimals
        Decimals may be written with a comma (a CSV file that is not separated by commas).
    """

    file: str
    names: tuple[str, ...]
    columns: tuple[RawColumn, ...]
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
    strange: list[Path] = []
    for path in sorted(folder.iterdir()):
        # Editors and file systems leave copies such as ~$loads.csv and ._loads.csv beside a file.
        if path.suffix.lower() not in FORMATS or path.name.startswith((".", "~")):
            continue
        if path.stem not in TABLES or path.suffix not in FORMATS:
            strange.append(path)
        elif path.stem in found:
            log.fault(path.name, f"is there beside {found[path.stem].name}: keep one of the two")
        else:
            found[path.stem] = path
    for path in strange:
        meant = nearest(path.stem, TABLES)
        message = "is not a table of a scenario folder and is not read"
        if meant is not None and meant not in found:
            log.fault(path.name, f"{message}; did you mean {meant!r}?", kind="unknown table")
        else:
            log.warn(path.name, message, kind="unknown table")
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
    header = _first_line(text)
    if header is None:
        log.fault(file, "is empty: not even a header")
        return None
    # Comma first: it decides where several marks are there equally often.
    delimiter = max(_DELIMITERS, key=lambda mark: (header.count(mark), mark == ","))
    coder = _Coder(file, delimiter, log)
    try:
        for records in _chunks(text, delimiter):
            coder.add(records)
    except csv.Error as error:
        reason = str(error)
        if "field larger" in reason or "unexpected end" in reason:
            reason = "a quote is opened and not closed"
        log.fault(file, f"cannot be taken apart: {reason}", row=_last_good_line(text, delimiter) + 1)
        return None
    return coder.table(text)


def _first_line(text: str) -> str | None:
    """Return the first line that is not blank."""
    return next((line for line in io.StringIO(text) if line.strip()), None)


def _reader(text: str, delimiter: str) -> Reader:
    return csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)


def _chunks(text: str, delimiter: str) -> Iterator[list[list[str]]]:
    reader = _reader(text, delimiter)
    while records := list(islice(reader, _CHUNK)):
        yield records


def _last_good_line(text: str, delimiter: str) -> int:
    """Return the line on which the last record before a broken one ends."""
    reader = _reader(text, delimiter)
    line = 0
    try:
        for _ in reader:
            line = reader.line_num
    except csv.Error:
        pass
    return line


class _Coder:
    """Takes records in chunks and codes each column's texts."""

    def __init__(self, file: str, delimiter: str, log: FaultLog) -> None:
        self._file, self._delimiter, self._log = file, delimiter, log
        self._names: tuple[str, ...] = ()
        self._index: list[defaultdict[str, int]] = []
        self._codes: list[list[IntArray]] = []
        self._seen = 0
        self._skipped: list[int] = []
        self._wrong: list[tuple[int, int]] = []

    def add(self, records: list[list[str]]) -> None:
        """Take the next records of the file, header first."""
        start = 0
        while not self._names and start < len(records):
            if any(field.strip() for field in records[start]):
                self._names = tuple(name.strip() for name in records[start])
                for _ in self._names:
                    index: defaultdict[str, int] = defaultdict()
                    index.default_factory = index.__len__
                    self._index.append(index)
                    self._codes.append([])
            else:
                self._skipped.append(self._seen)
            self._seen += 1
            start += 1
        rows = self._usable(records[start:])
        self._seen += len(records) - start
        if rows:
            for index, codes, column in zip(self._index, self._codes, zip(*rows, strict=True), strict=True):
                codes.append(np.fromiter(map(index.__getitem__, column), np.int64, len(rows)))

    def _usable(self, records: list[list[str]]) -> list[list[str]]:
        """Return the records as wide as the header; others are noted, rows without content left out."""
        width = len(self._names)
        if all(len(record) == width and (record[0] or record[-1]) for record in records):
            return records
        usable = []
        for number, record in enumerate(records, start=self._seen):
            if not any(field.strip() for field in record):
                self._skipped.append(number)
            elif len(record) != width and (len(record) < width or any(field.strip() for field in record[width:])):
                self._skipped.append(number)
                self._wrong.append((number, len(record)))
            else:
                usable.append(record[:width])
        return usable

    def table(self, text: str) -> RawTable:
        """Return the table; rows of the wrong width become faults."""
        delimiter, skipped = self._delimiter, np.asarray(self._skipped, dtype=np.int64)

        @cache
        def line_of_record() -> IntArray:
            reader = _reader(text, delimiter)
            ends = np.fromiter((reader.line_num for _ in reader), np.int64)
            # A record starts on the line after the one before it ends.
            return np.concatenate([[1], ends[:-1] + 1]).astype(np.int64)

        @cache
        def line_of_row() -> IntArray:
            return np.asarray(np.delete(line_of_record(), skipped)[1:])

        def lines(rows: IntArray) -> IntArray:
            return np.asarray(line_of_row()[rows])

        if self._wrong:
            starts = line_of_record()
            for record, width in self._wrong[:1000]:
                self._log.fault(
                    self._file,
                    f"has {width} fields where the header has {len(self._names)}",
                    row=int(starts[record]),
                    allowed=f"{len(self._names)} fields separated by {_DELIMITERS[delimiter]}",
                    kind="field count",
                )
            if len(self._wrong) > 1000:
                rest = f"and {len(self._wrong) - 1000:,} more rows with another number of fields"
                self._log.fault(self._file, rest, kind="field count (rest)")
        columns = tuple(
            TextColumn(np.concatenate(codes) if codes else np.zeros(0, np.int64), tuple(index)).trimmed()
            for index, codes in zip(self._index, self._codes, strict=True)
        )
        return RawTable(self._file, self._names, columns, lines, delimiter != ",")


def _read_parquet(file: str, content: bytes, log: FaultLog) -> RawTable | None:
    import pyarrow as pa

    from lmpgap.scenario.parquet_file import read_parquet

    try:
        names, columns = read_parquet(content)
    except (pa.ArrowException, OSError, ValueError, OverflowError) as error:
        reason = (str(error).splitlines() or ["unknown content"])[0]
        log.fault(file, f"is not a readable Parquet file: {clip_text(reason)}")
        return None
    return RawTable(file, tuple(name.strip() for name in names), tuple(columns), row_numbers)


def table_from_arrow(file: str, table: pa.Table) -> RawTable:
    """Return an Arrow table as raw columns."""
    from lmpgap.scenario.parquet_file import columns_of

    names, columns = columns_of(table)
    return RawTable(file, tuple(name.strip() for name in names), tuple(columns), row_numbers)
