"""Text tables as streams of rows that remember where they stand in the file."""

from __future__ import annotations

import codecs
import csv
import gc
import hashlib
import io
from collections.abc import Callable, Generator, Iterator
from dataclasses import dataclass, field
from itertools import islice
from typing import BinaryIO

import numpy as np

from twicetold.catalogue import limits
from twicetold.catalogue.model import IntArray, SourceFile
from twicetold.catalogue.notes import Notes, Spot

_BLOCK = limits.MEBIBYTE
Opener = Callable[[], BinaryIO]


class TableStoppedError(Exception):
    """The rest of a table cannot be read; the reason has been noted."""


@dataclass(frozen=True)
class Chunk:
    """Some whole rows of a table: their row numbers and their cells, column by column."""

    rows: IntArray
    columns: list[tuple[str, ...]]


@dataclass
class Table:
    """A table with its header, whose rows are read when asked for.

    ``ragged`` gathers the cells of rows that do not fit the header: their ids are known to exist,
    though nothing else of them can be trusted. ``stopped`` says that the table broke off.
    """

    file: str
    header: tuple[str, ...]
    header_row: int
    records: Callable[[], Iterator[list[str]]]
    notes: Notes
    lines: int = 0
    nulls: dict[int, frozenset[str]] = field(default_factory=dict)
    separators: dict[int, str] = field(default_factory=dict)
    ragged: list[list[str]] = field(default_factory=list)
    stopped: bool = False

    def spot(self, row: int = 0, at: int = -1, column: str = "") -> Spot:
        """The place of a row, and of a column by its index or name, for a note."""
        return Spot(self.notes, self.file, row, self.header[at] if at >= 0 else column)

    def chunks(self, size: int = limits.CHUNK_ROWS) -> Iterator[Chunk]:
        """Rows that fit the header, in order; blank rows are passed over, ragged ones noted."""
        width = len(self.header)
        row = self.header_row + 1
        source = self.records()
        size = max(1, min(size, 8 * 1_000_000 // max(1, width)))
        while block := self._block(source, size):
            rows = np.arange(row, row + len(block), dtype=np.int32)
            row += len(block)
            if row > limits.TABLE_ROWS:
                self.spot().error(
                    "too many rows",
                    f"has more than {limits.TABLE_ROWS:,} rows.",
                    "Split the catalogue, or drop rows that are not needed.",
                )
                self.stopped = True
                return
            if set(map(len, block)) != {width} or not all(map(any, block)):
                block, rows = self._fitting(block, rows, width)
            if block:
                yield Chunk(rows, list(zip(*block, strict=True)))

    def _block(self, source: Iterator[list[str]], size: int) -> list[list[str]]:
        try:
            return list(islice(source, size))
        except TableStoppedError:
            self.stopped = True
            return []

    def _fitting(
        self, block: list[list[str]], rows: IntArray, width: int
    ) -> tuple[list[list[str]], IntArray]:
        kept: list[list[str]] = []
        numbers: list[int] = []
        for record, number in zip(block, rows.tolist(), strict=True):
            if not any(cell.strip() for cell in record):
                continue
            if len(record) > width and not any(record[width:]):
                record = record[:width]  # noqa: PLW2901 - trailing blanks carry nothing
            if len(record) != width:
                self.ragged.append([cell[: limits.ID_CHARS] for cell in record[:width]])
                self.spot(number).error(
                    "ragged row",
                    f"has {len(record)} cells where the header has {width}.",
                    "Give the row one cell per column; put quotes around cells that hold the "
                    "separator.",
                )
                continue
            kept.append(record)
            numbers.append(number)
        return kept, np.asarray(numbers, dtype=np.int32)


def unburdened(chunks: Iterator[Chunk]) -> Iterator[Chunk]:
    """The same chunks, read with the search for reference cycles paused.

    Rows of text hold no cycles, and the search over millions of them takes two fifths of the time.
    """
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield from chunks
    finally:
        if was_on:
            gc.enable()


@dataclass(frozen=True)
class Dialect:
    """How a text table is written; a delimiter of "" is guessed from the header."""

    delimiter: str = ""
    quote: str = '"'
    double_quote: bool = True
    encoding: str = "utf-8"
    comment: str = ""
    skip_rows: int = 0
    header_rows: int = 1
    skip_space: bool = False


def open_table(
    opener: Opener,
    file: str,
    notes: Notes,
    *,
    dialect: Dialect | None = None,
    names: tuple[str, ...] = (),
    sources: list[SourceFile] | None = None,
) -> Table | None:
    """Scan a text table once (bytes, encoding, hash), read its header, and hand back its stream.

    Returns None, with the reason noted, when the table cannot be read at all.
    """
    dialect = dialect or Dialect()
    lines = _scan(opener, file, notes, dialect.encoding, sources)
    if lines is None:
        return None
    if not dialect.delimiter:
        dialect = _guess(opener, file, dialect)
    header: tuple[str, ...] = names
    row = 0
    if dialect.header_rows:
        found = first_filled_row(_records(opener, file, notes, dialect))
        if found is None:
            return None
        row, header = found
        if not row:
            _say_empty(file, notes)
            return None
        row += dialect.header_rows - 1
    if not check_header(header, file, row, notes):
        return None

    def records() -> Iterator[list[str]]:
        inner = _records(opener, file, notes, dialect)
        return islice(inner, row, None)

    return Table(file, header, row, records, notes, lines)


def first_filled_row(
    records: Generator[list[str], None, None],
) -> tuple[int, tuple[str, ...]] | None:
    """Number and trimmed cells of the first row that is not blank (0 when there is none).

    None when the table breaks off before; the reason has then been noted.
    """
    try:
        for row, record in enumerate(records, start=1):
            if any(cell.strip() for cell in record):
                return row, tuple(cell.strip() for cell in record)
    except TableStoppedError:
        return None
    finally:
        records.close()
    return 0, ()


def check_header(header: tuple[str, ...], file: str, row: int, notes: Notes) -> bool:
    """Whether the column names can be told apart; says so when not."""
    if len(header) > limits.TABLE_COLUMNS:
        Spot(notes, file, row=row).error(
            "too many columns",
            f"has {len(header):,} columns, more than {limits.TABLE_COLUMNS:,}.",
            "Give long tables as one row per motif and tradition.",
        )
        return False
    seen: dict[str, int] = {}
    good = True
    for place, name in enumerate(header, start=1):
        if name and name in seen:
            # The name is not repeated here: in a wide matrix it may be a protected id.
            Spot(notes, file, row).error(
                "repeated column",
                f"columns {seen[name]} and {place} have the same name.",
                "Rename or remove one of them.",
            )
            good = False
        seen.setdefault(name, place)
    return good


def _say_empty(file: str, notes: Notes) -> None:
    Spot(notes, file).error(
        "empty table", "is empty.", "Put the column names in the first row and the data below."
    )


def _scan(
    opener: Opener, file: str, notes: Notes, encoding: str, sources: list[SourceFile] | None
) -> int | None:
    """Read every byte once: hash, size, encoding, NUL bytes, line length. Returns the lines."""
    digest = hashlib.sha256()
    decoder = codecs.getincrementaldecoder(encoding)()
    size = lines = since_break = 0
    with opener() as handle:
        while True:
            block = handle.read(_BLOCK)
            if size == 0 and block[:2] in (b"\xff\xfe", b"\xfe\xff") and encoding == "utf-8":
                _say_encoding(file, notes, row=1, offset=0, byte=block[0], guess="UTF-16")
                return None
            pending = decoder.getstate()[0]
            try:
                decoder.decode(block, final=not block)
            except UnicodeDecodeError as exc:
                whole = pending + block
                row = lines + 1 + whole.count(b"\n", 0, exc.start)
                guess = "Windows-1252 (Western European)"
                _say_encoding(
                    file,
                    notes,
                    row=row,
                    offset=size - len(pending) + exc.start,
                    byte=whole[exc.start],
                    guess=guess,
                )
                return None
            if not block:
                break
            if encoding == "utf-8" and (nul := block.find(b"\x00")) >= 0:
                Spot(notes, file, row=lines + 1 + block.count(b"\n", 0, nul)).error(
                    "NUL byte",
                    f"holds a NUL byte (byte {size + nul + 1:,}), which no text table has.",
                    "Save the table again as CSV UTF-8; the file may be damaged or not a table.",
                )
                return None
            digest.update(block)
            size += len(block)
            lines += block.count(b"\n")
            last = max(block.rfind(b"\n"), block.rfind(b"\r"))
            since_break = since_break + len(block) if last < 0 else len(block) - last - 1
            if size > limits.TABLE_BYTES or since_break > limits.LINE_BYTES:
                _say_too_large(file, notes, size > limits.TABLE_BYTES, lines + 1)
                return None
    if sources is not None:
        sources.append(SourceFile(file, size, digest.hexdigest()))
    if size == 0:
        _say_empty(file, notes)
        return None
    return lines


def _say_encoding(file: str, notes: Notes, *, row: int, offset: int, byte: int, guess: str) -> None:
    Spot(notes, file, row=row).error(
        "not UTF-8",
        f"is not UTF-8: byte {offset + 1:,} of the file is 0x{byte:02X} (probably {guess}).",
        "Save it as 'CSV UTF-8' in the spreadsheet, or convert its encoding to UTF-8.",
    )


def _say_too_large(file: str, notes: Notes, whole: bool, row: int) -> None:
    if whole:
        Spot(notes, file).error(
            "too large",
            f"is larger than {limits.TABLE_BYTES // limits.MEBIBYTE:,} MiB.",
            "Drop columns that are not needed, or split the catalogue.",
        )
        return
    Spot(notes, file, row=row).error(
        "line too long",
        f"has a line longer than {limits.LINE_BYTES // limits.MEBIBYTE} MiB.",
        "Check that the file is a table with one row a line.",
    )


def _guess(opener: Opener, file: str, dialect: Dialect) -> Dialect:
    with opener() as handle:
        first = handle.read(_BLOCK).lstrip(b"\xef\xbb\xbf\r\n").split(b"\n", 1)[0]
    delimiter = "\t" if file.lower().removesuffix(".zip").endswith((".tsv", ".tab")) else ","
    if delimiter.encode() not in first:
        for other in ("\t", ";", ","):
            if other.encode() in first:
                delimiter = other
                break
    return Dialect(delimiter=delimiter, encoding=dialect.encoding)


def _records(
    opener: Opener, file: str, notes: Notes, dialect: Dialect
) -> Generator[list[str], None, None]:
    """Every row of the file, blank ones as empty lists, so that counting gives row numbers."""
    encoding = "utf-8-sig" if dialect.encoding == "utf-8" else dialect.encoding
    count = 0
    with opener() as binary, io.TextIOWrapper(binary, encoding=encoding, newline="") as text:
        for _ in range(dialect.skip_rows):
            text.readline()
        reader = csv.reader(
            text,
            delimiter=dialect.delimiter,
            quotechar=dialect.quote or None,
            quoting=csv.QUOTE_MINIMAL if dialect.quote else csv.QUOTE_NONE,
            doublequote=dialect.double_quote,
            escapechar=None if dialect.double_quote or not dialect.quote else "\\",
            skipinitialspace=dialect.skip_space,
            strict=True,
        )
        try:
            for record in reader:
                count += 1
                if dialect.comment and record and record[0].startswith(dialect.comment):
                    yield []
                    continue
                yield record
        except (csv.Error, UnicodeDecodeError) as exc:
            _say_broken(file, notes, count + 1, str(exc))
            raise TableStoppedError from exc


def _say_broken(file: str, notes: Notes, row: int, reason: str) -> None:
    if "field larger" in reason:
        Spot(notes, file, row=row).error(
            "cell too long",
            "has a cell too long for a table, or a quotation mark that is never closed.",
            "Look for a lone quotation mark in this row, or shorten the cell.",
        )
        return
    Spot(notes, file, row=row).error(
        "broken quotes",
        "has a quotation mark that does not close before the next separator.",
        'Double the quotation marks inside quoted cells ("") or take them out.',
    )
