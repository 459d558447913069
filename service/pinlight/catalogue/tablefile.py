"""Table files in chunks of rows: CSV, ECSV, VOTable, FITS and Parquet."""

import csv
import hashlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import islice
from pathlib import Path
from typing import Any

from pinlight.errors import InputError

__all__ = ["FORMATS", "Chunk", "Column", "TableFile", "open_table"]

FORMATS = {
    ".csv": "csv", ".tsv": "csv", ".ecsv": "ecsv", ".vot": "votable", ".xml": "votable", ".votable": "votable",
    ".fits": "fits", ".fit": "fits", ".fits.gz": "fits", ".parquet": "parquet",
}  # fmt: skip
_WIDEST = 1000


@dataclass(frozen=True)
class Column:
    """A column as its file describes it."""

    name: str
    unit: str | None = None
    ucd: str | None = None


@dataclass
class Chunk:
    """Some rows: `values` by column, each of the length of `lines`; `bad` are rows that cannot be read.

    lines : line numbers of text files, row numbers (from 1) of others
    """

    lines: Sequence[int]
    values: dict[str, Sequence[Any]]
    bad: dict[int, str] = field(default_factory=dict)


class TableFile:
    """A table's columns, and its rows in chunks."""

    def __init__(self, path: Path, kind: str) -> None:
        self.path, self.kind = path, kind
        self.columns: list[Column] = []
        self.row_count: int | None = None
        self._delimiter = ","
        self._table: Any = None
        self._file: Any = None
        try:
            getattr(self, f"_open_{kind}")()
        except InputError:
            self.close()
            raise
        except Exception as error:  # whatever a reader meets in a broken file
            raise InputError(f"cannot read {path} as {kind}: {' '.join(str(error).split())[:200]}") from error
        names = [column.name for column in self.columns]
        if not names or len(names) > _WIDEST:
            raise InputError(f"{path} has {len(names)} columns; a table has 1 to {_WIDEST}")
        if twice := sorted({name for name in names if names.count(name) > 1}):
            raise InputError(f"{path} has the column {twice[0]!r} twice; give each its own name")

    def close(self) -> None:
        """Let go of the file."""
        if self._file is not None:
            self._file.close()

    def content_hash(self) -> str:
        """The SHA-256 of the file."""
        with self.path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()

    def chunks(self, size: int, skip: int = 0) -> Iterator[Chunk]:
        """The rows after the first `skip`, at most `size` at a time."""
        try:
            yield from getattr(self, f"_{self.kind}_chunks")(size, skip)
        except (OSError, csv.Error, UnicodeDecodeError) as error:
            raise InputError(f"cannot read {self.path}: {error}") from error

    def _open_csv(self) -> None:
        with self.path.open(encoding="utf-8-sig", newline="") as file:
            lines = (line for line in file if line.strip() and not line.startswith("#"))
            header = next(lines, "")
        self._delimiter = max(",\t;", key=header.count)
        names = next(csv.reader([header], delimiter=self._delimiter), [])
        self.columns = [Column(name.strip()) for name in names]

    def _open_ecsv(self) -> None:
        from astropy.table import Table

        header = []
        with self.path.open(encoding="utf-8", newline="") as file:
            for line in file:
                header.append(line.rstrip("\r\n"))
                if not line.startswith("#"):
                    break
        described = Table.read(header, format="ascii.ecsv")
        self._delimiter = "," if any("delimiter: ','" in line for line in header) else " "
        self.columns = [
            Column(
                name, str(described[name].unit) if described[name].unit else None, _ucd(described[name].meta)
            )
            for name in described.colnames
        ]

    def _csv_chunks(self, size: int, skip: int) -> Iterator[Chunk]:
        width = len(self.columns)
        names = [column.name for column in self.columns]
        with self.path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file, delimiter=self._delimiter)
            rows = ((reader.line_num, row) for row in reader if row and not row[0].startswith("#"))
            next(rows, None)
            next(islice(rows, skip, skip), None)
            while part := list(islice(rows, size)):
                bad = {
                    index: f"has {len(row)} fields, not {width}"
                    for index, (_, row) in enumerate(part)
                    if len(row) != width
                }
                blank = [""] * width
                kept = [blank if index in bad else row for index, (_, row) in enumerate(part)]
                values: dict[str, Sequence[Any]] = dict(zip(names, zip(*kept, strict=True), strict=True))
                yield Chunk([line for line, _ in part], values, bad)

    _ecsv_chunks = _csv_chunks

    def _open_votable(self) -> None:
        from astropy.io.votable import parse_single_table

        table = parse_single_table(str(self.path), verify="ignore")
        self._table = table.array
        known = set(table.array.dtype.names)
        self.columns = [
            Column(item.ID if item.ID in known else item.name, _told(item.unit), item.ucd)
            for item in table.fields
        ]
        self.row_count = len(table.array)

    def _votable_chunks(self, size: int, skip: int) -> Iterator[Chunk]:
        for start in range(skip, len(self._table), size):
            part = self._table[start : start + size]
            values = {column.name: _plain(part[column.name]) for column in self.columns}
            yield Chunk(range(start + 1, start + 1 + len(part)), values)

    def _open_fits(self) -> None:
        from astropy.io import fits

        hdus = self._file = fits.open(self.path, memmap=True)
        tables = [hdu for hdu in hdus if isinstance(hdu, fits.BinTableHDU | fits.TableHDU)]
        if not tables:
            raise InputError(f"{self.path} holds no table")
        self._table = tables[0]
        self.columns = [
            Column(one.name, one.unit or None, tables[0].header.get(f"TUCD{index}"))
            for index, one in enumerate(tables[0].columns, start=1)
        ]
        self.row_count = len(tables[0].data)

    def _fits_chunks(self, size: int, skip: int) -> Iterator[Chunk]:
        import numpy as np

        data, nulls = self._table.data, {one.name: one.null for one in self._table.columns}
        for start in range(skip, len(data), size):
            part = data[start : start + size]
            values = {}
            for column in self.columns:
                array = np.asarray(part[column.name])
                null = nulls[column.name]
                values[column.name] = _plain(array if null is None else np.ma.masked_equal(array, null))
            yield Chunk(range(start + 1, start + 1 + len(part)), values)

    def _open_parquet(self) -> None:
        try:
            from pyarrow import parquet
        except ImportError as error:
            raise InputError("reading Parquet takes pyarrow; run pip install 'pinlight[parquet]'") from error
        file = parquet.ParquetFile(self.path)
        self._table, self.row_count = file, file.metadata.num_rows
        described: dict[str, Any] = {}
        if written := (file.schema_arrow.metadata or {}).get(b"table_meta_yaml"):
            from astropy.table import meta

            header = meta.get_header_from_yaml(written.decode().split("\n"))
            described = {one["name"]: one for one in header["datatype"]}
        facts = [(name, described.get(name, {})) for name in file.schema_arrow.names]
        self.columns = [Column(name, _told(one.get("unit")), _ucd(one.get("meta"))) for name, one in facts]

    def _parquet_chunks(self, size: int, skip: int) -> Iterator[Chunk]:
        done = 0
        for batch in self._table.iter_batches(batch_size=size):
            if done + batch.num_rows > skip:
                part = batch.slice(max(skip - done, 0))
                first = max(done, skip) + 1
                values = {name: part.column(name).to_pylist() for name in part.schema.names}
                for name in [name for name in values if f"{name}.mask" in values]:  # as astropy writes masks
                    masks = values[f"{name}.mask"]
                    values[name] = [None if m else v for v, m in zip(values[name], masks, strict=True)]
                yield Chunk(range(first, first + part.num_rows), values)
            done += batch.num_rows


def _told(unit: Any) -> str | None:
    return str(unit) if unit else None


def _ucd(described: Any) -> str | None:
    return described.get("ucd") if isinstance(described, dict) else None


def _plain(array: Any) -> Sequence[Any]:
    """A column of an array as a list; masked values become None, bytes become text."""
    values = array.tolist()
    if array.dtype.kind == "S" or (values and any(isinstance(value, bytes) for value in values[:100])):
        return [value.decode("utf-8", "replace") if isinstance(value, bytes) else value for value in values]
    return list(values)


def open_table(path: Path) -> TableFile:
    """A table file by its ending.

    Raises
    ------
    InputError
        If the ending is unknown or the file cannot be read.
    """
    name = path.name.lower()
    kind = next(
        (FORMATS[ending] for ending in sorted(FORMATS, key=len, reverse=True) if name.endswith(ending)), None
    )
    if kind is None:
        raise InputError(f"file is {path}; its name may end in one of {', '.join(FORMATS)}")
    if not path.is_file():
        raise InputError(f"cannot read {path}: there is no such file")
    return TableFile(path, kind)
