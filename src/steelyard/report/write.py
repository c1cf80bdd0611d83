"""Writing an answer's five files, all or nothing."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from steelyard.errors import OutputError
from steelyard.report.disclosure import HIDDEN_COUNT, Shown, shown
from steelyard.report.html import report_html
from steelyard.results.answer import Answer

EFFECT_COLUMNS = (
    *("outcome", "measure", "estimand", "domain", "exposed", "reference", "estimate", "std_error"),
    *("ci_low", "ci_high", "df", "statistic", "p_value", "variance", "rows", "psus", "strata"),
)
BALANCE_COLUMNS = (
    *("term", "level"),
    *(
        f"{name}_{when}"
        for when in ("before", "after")
        for name in ("mean_exposed", "mean_reference", "smd", "variance_ratio", "ks", "p")
    ),
)


def write_answer(answer: Answer, directory: str | Path) -> tuple[Path, ...]:
    """Write effects.csv, balance.csv, weights.parquet, report.html and record.json into a directory.

    Everything is written beside it first and renamed into place at the end: whatever interrupts the
    writing, results that were there stay whole, and nothing half-written is left.

    Raises
    ------
    OutputError
        The directory cannot be written, or the disk is full.
    """
    directory = Path(directory)
    tables = shown(answer)
    writers: dict[str, Callable[[Path], None]] = {
        "effects.csv": lambda path: _csv(_released(tables.effects, answer, tables), path),
        "balance.csv": lambda path: _csv(tables.balance[list(BALANCE_COLUMNS)], path),
        "weights.parquet": lambda path: _weights(answer, path),
        "report.html": lambda path: _text(report_html(answer, tables), path),
        "record.json": lambda path: _text(_record(answer, tables), path),
    }
    with _told(directory), _beside(directory) as folder:
        for name, write in writers.items():
            write(folder / name)
            _settle(folder / name)
        return _moved(folder, directory, tuple(writers))


def _released(effects: pd.DataFrame, answer: Answer, tables: Shown) -> pd.DataFrame:
    """Return effects.csv: a row count under the minimum is left empty."""
    frame = effects[list(EFFECT_COLUMNS)].copy()
    small = (frame["rows"] > 0) & (frame["rows"] < tables.minimum)
    frame["rows"] = frame["rows"].astype("Int64").mask(small)
    return frame


def _csv(frame: pd.DataFrame, path: Path) -> None:
    frame.to_csv(path, index=False, lineterminator="\n", encoding="utf-8")


def _text(text: str, path: Path) -> None:
    path.write_text(text, encoding="utf-8", newline="\n")


def _weights(answer: Answer, path: Path) -> None:
    metadata = {
        "steelyard.plan": json.dumps(answer.record["plan"], ensure_ascii=False),
        "steelyard.plan_sha256": str(answer.record["plan_sha256"]),
        "steelyard.caution": "Weights of single persons: not for release without review by a disclosure officer.",
    }
    writer = None
    try:
        for batch in answer.weights():
            if writer is None:
                schema = batch.schema.with_metadata(metadata)
                writer = pq.ParquetWriter(path, schema, compression="zstd")
            writer.write_batch(batch.replace_schema_metadata(metadata))
    finally:
        if writer is not None:
            writer.close()


def _record(answer: Answer, tables: Shown) -> str:
    hidden = {"minimum_count": tables.minimum, "hidden": list(tables.hidden), "sign": HIDDEN_COUNT}
    record = {**answer.record, "disclosure": {k: v for k, v in hidden.items() if k != "sign"}}
    return json.dumps(record, indent=2, ensure_ascii=False, default=_plain) + "\n"


def _plain(value: object) -> object:
    if value is pd.NA:
        return None
    item = getattr(value, "item", None)
    if item is None:
        raise TypeError(f"{type(value).__name__} has no JSON form")
    return item()


@contextmanager
def _told(directory: Path) -> Iterator[None]:
    """Tell errors of the file system in words that name the directory and the mend."""
    try:
        yield
    except (OSError, pa.ArrowException) as error:
        reason = getattr(error, "strerror", None) or str(error).splitlines()[0]
        raise OutputError(
            f"The results cannot be written to {directory}: {reason}.",
            mend="Nothing was changed there. Free some space or name another directory.",
        ) from error


@contextmanager
def _beside(directory: Path) -> Iterator[Path]:
    """Give a folder on the same file system as the directory, gone at the end, whatever happens."""
    if directory.exists() and not directory.is_dir():
        raise OutputError(f"{directory} is a file.", mend="Name a directory for the results.")
    missing = []
    parent = directory.absolute().parent
    while not parent.exists():
        missing.append(parent)
        parent = parent.parent
    directory.absolute().parent.mkdir(parents=True, exist_ok=True)
    folder = Path(
        tempfile.mkdtemp(prefix=f".{directory.name}-", suffix=".part", dir=directory.absolute().parent)
    )
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)
        if not directory.exists():
            for made in missing:
                made.rmdir()


def _settle(path: Path) -> None:
    """Have the file on the disk before it gets its name."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _moved(folder: Path, directory: Path, names: tuple[str, ...]) -> tuple[Path, ...]:
    """Put finished files in place: the whole folder where there is none yet, else file by file, with a way back."""
    if not directory.exists():
        mode = 0o777 & ~_umask()
        folder.chmod(mode)
        folder.rename(directory)
        return tuple(directory / name for name in names)
    old = folder / "old"
    old.mkdir()
    replaced: list[str] = []
    try:
        for name in names:
            if (directory / name).exists():
                (directory / name).rename(old / name)
            replaced.append(name)
            (folder / name).rename(directory / name)
    except BaseException:
        for name in replaced:
            (directory / name).unlink(missing_ok=True)
            if (old / name).exists():
                (old / name).rename(directory / name)
        raise
    return tuple(directory / name for name in names)


def _umask() -> int:
    current = os.umask(0)
    os.umask(current)
    return current
