"""Where an extract lies: Parquet files, an Arrow table or dataset, or a pandas frame; read run by run.

Knows file names, column kinds and the order of rows. Refuses to know what a column means.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.parquet as pq

from steelyard.data.files import find_files
from steelyard.errors import ExtractError

READ_ROWS = 16_384
# A file may be one row group of a million rows: its columns are decoded in pieces of this many bytes.
READ_BYTES = 65_536


@dataclass(frozen=True)
class Part:
    """One file of an extract, or the whole of one in memory: its name, schema, rows, and how to read it."""

    name: str
    path: Path | None
    schema: pa.Schema
    rows: int
    batches: Callable[[list[str], int], Iterator[pa.RecordBatch]]

    @property
    def told(self) -> str:
        """The part as a message names it."""
        if self.path:
            return self.name
        return "the dataset" if self.name == "dataset" else "the extract in memory"


@dataclass(frozen=True)
class Extract:
    """The parts of an extract in order, and the kind of every column.

    ``columns`` maps names to "number" (integers, floats, decimals), "boolean", "category" (text,
    dictionary-encoded text) or "other" (dates, nested).
    """

    parts: tuple[Part, ...]
    columns: Mapping[str, str]

    @property
    def rows(self) -> int:
        """Rows in all parts."""
        return sum(part.rows for part in self.parts)

    def require(self, names: Sequence[str], what: str = "plan") -> None:
        """Refuse names that the extract, or one of its files, does not have.

        Raises
        ------
        ExtractError
            Naming the column, the file where it is missing or stands twice, and the nearest existing name.
        """
        for name in names:
            for part in self.parts:
                count = part.schema.names.count(name)
                if count > 1:
                    raise ExtractError(
                        f'Column "{name}" stands {count} times in {part.told}.',
                        mend="Rename or drop all but one.",
                    )
                if count:
                    continue
                near = get_close_matches(name, part.schema.names, n=1, cutoff=0.6)
                hint = f'Did you mean "{near[0]}"?' if near else f"It has {_some(part.schema.names)}."
                raise ExtractError(
                    f'The {what} names column "{name}", which {part.told} does not have.', mend=hint
                )

    def read(self, columns: Sequence[str], size: int = READ_ROWS) -> Iterator[tuple[int, pa.Table]]:
        """Give the named columns in runs of ``size`` rows (the last one shorter), with each run's first row.

        Raises
        ------
        ExtractError
            A column is not in every file, a file is cut short, damaged or gone, or has changed since it was
            opened, or its numbers do not fit the type they have in the other files.
        """
        names = list(dict.fromkeys(columns))
        self.require(names)
        types = [self._type(name) for name in names]
        start, held, count = 0, [], 0
        for part in self.parts:
            for batch in _guarded(part, names, size):
                held.append(_plain(part.told, batch, types))
                count += batch.num_rows
                while count >= size:
                    table = pa.Table.from_batches(held)
                    yield start, table.slice(0, size)
                    start += size
                    count -= size
                    held = table.slice(size).to_batches() if count else []
        if count:
            yield start, pa.Table.from_batches(held)

    def _type(self, name: str) -> pa.DataType | None:
        """Return the one type in which a column is read from every part; None leaves it as it is."""
        kind = self.columns[name]
        if kind == "boolean":
            return pa.bool_()
        if kind == "category":
            return pa.dictionary(pa.int32(), pa.string())
        if kind == "number":
            types = [part.schema.field(name).type for part in self.parts]
            return pa.int64() if all(_is_whole(each) for each in types) else pa.float64()
        return None

    def digests(self) -> pd.DataFrame:
        """Return name, rows, bytes and SHA-256 of every file; none of the latter for data in memory."""
        records = []
        for part in self.parts:
            size, digest = None, ""
            if part.path is not None:
                try:
                    size = part.path.stat().st_size
                    with part.path.open("rb") as file:
                        digest = hashlib.file_digest(file, "sha256").hexdigest()
                except PermissionError:
                    raise _forbidden(part.name) from None
                except OSError:
                    raise _gone(part.name) from None
            records.append({"file": part.name, "rows": part.rows, "bytes": size, "sha256": digest})
        return pd.DataFrame.from_records(records).astype({"bytes": "Int64"})


def open_extract(extract: Any, folder: Path | None = None) -> Extract:
    """Open an extract without reading its rows.

    Parameters
    ----------
    extract : path, glob, folder, list of them, pyarrow Table or Dataset, or pandas frame
        Relative names start at ``folder``. A list keeps its order; globs and folders go by name, folders
        with all below them, without names that begin with ``.`` or ``_``.

    Raises
    ------
    ExtractError
        No file matches, a file is named twice, is not Parquet or is cut short, files disagree about the kind
        of a column, or there are no rows.
    """
    if isinstance(extract, pd.DataFrame):
        parts: tuple[Part, ...] = (_table_part(_from_pandas(extract)),)
    elif isinstance(extract, pa.Table):
        parts = (_table_part(extract),)
    elif isinstance(extract, ds.Dataset):
        parts = (_dataset_part(extract),)
    elif isinstance(extract, str | Path | list | tuple):
        parts = tuple(_file_part(name, path) for name, path in find_files(extract, folder or Path()))
    else:
        raise ExtractError(
            f"An extract cannot be a {type(extract).__name__}.",
            mend="Give Parquet file names, an Arrow table or dataset, or a pandas frame.",
        )
    opened = Extract(parts, _kinds(parts))
    if not opened.rows:
        raise ExtractError("The extract has no rows.", mend="Check data.files.")
    return opened


def kind_of(kind: pa.DataType) -> str:
    """Return what a column of this Arrow type is to a plan: "number", "boolean", "category" or "other"."""
    if pa.types.is_dictionary(kind):
        return kind_of(kind.value_type)
    if pa.types.is_boolean(kind):
        return "boolean"
    if pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind):
        return "number"
    if pa.types.is_string(kind) or pa.types.is_large_string(kind) or _is_view(kind):
        return "category"
    # A column without a single value can stand for anything; files beside it may say what it is.
    return "empty" if pa.types.is_null(kind) else "other"


def _is_view(kind: pa.DataType) -> bool:
    return hasattr(pa.types, "is_string_view") and bool(pa.types.is_string_view(kind))


def _kinds(parts: tuple[Part, ...]) -> dict[str, str]:
    """Return the kind of every column, refusing files that disagree."""
    kinds: dict[str, tuple[str, str, pa.DataType]] = {}
    for part in parts:
        for field in part.schema:
            kind = kind_of(field.type)
            known = kinds.get(field.name)
            if known is None or known[0] == "empty":
                kinds[field.name] = (kind, part.name, field.type)
            elif kind not in (known[0], "empty"):
                raise ExtractError(
                    f'Column "{field.name}" is {known[2]} in {known[1]} but {field.type} in {part.name}.',
                    mend="Write it with one type in all files.",
                )
    return {name: "number" if kind == "empty" else kind for name, (kind, _, _) in kinds.items()}


def _file_part(name: str, path: Path) -> Part:
    try:
        stamp = _stamp(path)
        with _opened(path) as file:
            schema, rows = file.schema_arrow, file.metadata.num_rows
    except FileNotFoundError:
        raise ExtractError(
            f'There is no file "{name}".', mend="Check data.files; relative names start at the plan's folder."
        ) from None
    except PermissionError:
        raise _forbidden(name) from None
    except (pa.ArrowException, OSError) as error:
        raise _damaged(name, error) from None

    def batches(columns: list[str], size: int) -> Iterator[pa.RecordBatch]:
        if _stamp(path) != stamp:
            raise ExtractError(
                f"{name} has changed since it was opened.", mend="Run again when nobody writes to it."
            )
        with _opened(path) as file:
            yield from file.iter_batches(batch_size=size, columns=columns)

    return Part(name, path, schema, rows, batches)


def _opened(path: Path) -> pq.ParquetFile:
    """Open a file to be read piece by piece, whose pages are checked where they carry checksums."""
    return pq.ParquetFile(path, pre_buffer=False, buffer_size=READ_BYTES, page_checksum_verification=True)


def _stamp(path: Path) -> tuple[int, int]:
    """Return the size in bytes of a file and when it was last written, in nanoseconds."""
    status = path.stat()
    return status.st_size, status.st_mtime_ns


def _table_part(table: pa.Table) -> Part:
    def batches(columns: list[str], size: int) -> Iterator[pa.RecordBatch]:
        yield from table.select(columns).to_batches(max_chunksize=size)

    return Part("in memory", None, table.schema, table.num_rows, batches)


def _dataset_part(dataset: ds.Dataset) -> Part:
    def batches(columns: list[str], size: int) -> Iterator[pa.RecordBatch]:
        yield from dataset.to_batches(
            columns=columns, batch_size=size, batch_readahead=2, fragment_readahead=1
        )

    return Part("dataset", None, dataset.schema, dataset.count_rows(), batches)


def _from_pandas(frame: pd.DataFrame) -> pa.Table:
    repeated = frame.columns[frame.columns.duplicated()]
    if len(repeated):
        raise ExtractError(f'The frame has column "{repeated[0]}" twice.', mend="Rename or drop one.")
    try:
        return pa.Table.from_pandas(frame.rename(columns=str), preserve_index=False)
    except pa.ArrowException as error:
        raise ExtractError(
            f"The frame cannot be read: {'; '.join(map(str, error.args))}.",
            mend="Give every column values of one type.",
        ) from None


def _guarded(part: Part, names: list[str], size: int) -> Iterator[pa.RecordBatch]:
    """Give a part's batches, with its errors told in the words of an extract."""
    rows = 0
    try:
        for batch in part.batches(names, size):
            rows += batch.num_rows
            yield batch
    except FileNotFoundError:
        raise _gone(part.name) from None
    except PermissionError:
        raise _forbidden(part.name) from None
    except (pa.ArrowException, OSError) as error:
        raise _damaged(part.name, error) from None
    if rows != part.rows:
        raise ExtractError(
            f"{part.name} gave {rows:,} rows where it announced {part.rows:,}.", mend="Write the file again."
        )


def _plain(part: str, batch: pa.RecordBatch, types: Sequence[pa.DataType | None]) -> pa.RecordBatch:
    """Return the batch with each column in the type it has in all parts."""
    columns = []
    for name, column, kind in zip(batch.schema.names, batch.columns, types, strict=True):
        try:
            columns.append(_cast(column, kind))
        except pa.ArrowInvalid:
            raise ExtractError(
                f'Column "{name}" of {part} is {column.type} and holds a number that {kind} cannot hold exactly.',
                mend="Write it as text if it is an id, as double if it is an amount, and alike in all files.",
            ) from None
    return pa.RecordBatch.from_arrays(columns, names=batch.schema.names)


def _cast(column: pa.Array, kind: pa.DataType | None) -> pa.Array:
    if kind is None or column.type == kind:
        return column
    if pa.types.is_dictionary(kind) and not pa.types.is_dictionary(column.type):
        return column.cast(pa.string()).dictionary_encode()
    if pa.types.is_dictionary(column.type) and not pa.types.is_dictionary(kind):
        return column.dictionary_decode().cast(kind)
    return column.cast(kind)


def _is_whole(kind: pa.DataType) -> bool:
    if pa.types.is_dictionary(kind):
        return _is_whole(kind.value_type)
    return bool(
        pa.types.is_integer(kind) or pa.types.is_null(kind) or (pa.types.is_decimal(kind) and kind.scale == 0)
    )


def _gone(name: str) -> ExtractError:
    return ExtractError(
        f"{name} cannot be read any more: it was there when the extract was opened and is gone.",
        mend="Put the file back and run again.",
    )


def _forbidden(name: str) -> ExtractError:
    return ExtractError(
        f"{name} may not be read by this user.", mend="Ask its owner for the right to read it."
    )


def _damaged(name: str, error: Exception) -> ExtractError:
    return ExtractError(
        f"{name} is not a whole Parquet file: {str(error).splitlines()[0].rstrip('.')}.",
        mend="Copy or write it again, as it may have been cut short; leave it out if it never was Parquet.",
    )


def _some(names: Sequence[str]) -> str:
    return ", ".join(names[:8]) + (f" and {len(names) - 8} more columns" if len(names) > 8 else "")
