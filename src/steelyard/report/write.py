"""The five files of a run, written all or nothing."""

from __future__ import annotations

import io
import json
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from steelyard.report.disclosure import Released, release
from steelyard.report.page import report_html
from steelyard.report.record import plan_json, record_text
from steelyard.report.staging import staged
from steelyard.results.answer import Answer

FILES = ("effects.csv", "balance.csv", "weights.parquet", "report.html", "record.json")
REVIEW = "One row a person: not for release without review by a disclosure officer."


def write_answer(answer: Answer, directory: Path, released: Released | None = None) -> tuple[Path, ...]:
    """Write effects.csv, balance.csv, weights.parquet, report.html and record.json; return their paths.

    Either all five are there, or ``directory`` is as it was. ``released`` saves hiding small counts again.

    Raises
    ------
    OutputError
        The folder cannot be made or written to, or the disk is full.
    MissingExtraError
        What the report needs is not installed.
    """
    directory = Path(directory)
    released = release(answer) if released is None else released
    # Everything that can be made in memory is, before the disk is touched.
    texts = {
        "effects.csv": csv_text(released.every_effect),
        "balance.csv": csv_text(released.balance),
        "report.html": report_html(answer, released),
        "record.json": record_text(answer.record, released.warnings),
    }
    with staged(directory) as staging:
        for name in FILES:
            path = staging.path(name)
            if name == "weights.parquet":
                _write_weights(answer, path)
            else:
                path.write_bytes(texts[name].encode("utf-8", errors="backslashreplace"))
    return tuple(directory / name for name in FILES)


def csv_text(frame: pd.DataFrame) -> str:
    """Return a frame as CSV: every digit of its numbers, nothing for what is not defined, LF at line ends."""
    buffer = io.StringIO()
    frame.to_csv(buffer, index=False, lineterminator="\n")
    return buffer.getvalue()


def _write_weights(answer: Answer, path: Path) -> None:
    metadata = {
        "steelyard.plan": plan_json(answer.plan),
        "steelyard.plan_sha256": str(answer.record.get("plan_sha256", "")),
        "steelyard.variance": json.dumps(answer.variance.record(), ensure_ascii=False),
        "steelyard.note": REVIEW,
    }
    if answer.weights.replicates is not None:
        metadata["steelyard.how_to_use"] = answer.variance.usage(answer.weights.rows.replicates)
    schema = answer.weights.schema.with_metadata(metadata)
    with pq.ParquetWriter(path, schema) as writer:
        for batch in answer.weights():
            writer.write_batch(pa.RecordBatch.from_arrays(batch.columns, schema=schema))
