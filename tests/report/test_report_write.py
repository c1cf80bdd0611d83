"""Five files, all or nothing."""

from __future__ import annotations

import csv
import errno
import json
import os
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from report_answers import MadeWeights, made_answer

from steelyard.errors import OutputError
from steelyard.report import page, staging, write
from steelyard.report.disclosure import EFFECT_COLUMNS
from steelyard.report.staging import refuse_unusable, staged
from steelyard.report.write import FILES, write_answer


@pytest.fixture(scope="module")
def answer():
    return made_answer()


@pytest.fixture(autouse=True)
def quick_page(monkeypatch):
    """Files are what is tested here, not what the page says."""
    monkeypatch.setattr(write, "report_html", lambda answer, released: "<!DOCTYPE html>\n")


def contents(directory):
    return {path.name: path.read_bytes() for path in Path(directory).iterdir()}


def test_the_five_files_are_written_and_nothing_else(answer, tmp_path):
    paths = write_answer(answer, tmp_path / "new" / "results")
    assert tuple(path.name for path in paths) == FILES
    assert sorted(contents(tmp_path / "new" / "results")) == sorted(FILES)


def test_the_page_is_the_report(answer, tmp_path, monkeypatch):
    monkeypatch.setattr(write, "report_html", page.report_html)
    write_answer(answer, tmp_path)
    assert (tmp_path / "report.html").read_text(encoding="utf-8") == page.report_html(answer)


def test_numbers_in_the_tables_keep_every_digit(answer, tmp_path):
    write_answer(answer, tmp_path)
    expected = answer.effects.table
    with (tmp_path / "effects.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert list(rows[0]) == list(EFFECT_COLUMNS)
    for name in ("estimate", "std_error", "p_value", "ci_low"):
        assert [float(row[name]) for row in rows] == list(expected[name])
    raw = (tmp_path / "effects.csv").read_bytes()
    assert b"\r" not in raw
    raw.decode("utf-8")


def test_the_columns_of_the_balance_are_those_of_the_design(answer, tmp_path):
    write_answer(answer, tmp_path)
    names = ["mean_exposed", "mean_reference", "smd", "variance_ratio", "ks", "p"]
    expected = ["term", "level", *[f"{n}_before" for n in names], *[f"{n}_after" for n in names]]
    assert list(pd.read_csv(tmp_path / "balance.csv").columns) == expected


def test_the_weights_are_the_batches_with_the_plan_and_its_digest(answer, tmp_path):
    write_answer(answer, tmp_path)
    table = pq.read_table(tmp_path / "weights.parquet")
    assert table.replace_schema_metadata(None).equals(pa.Table.from_batches(answer.weights()))
    metadata = table.schema.metadata
    assert json.loads(metadata[b"steelyard.plan"])["title"] == answer.plan.title
    assert metadata[b"steelyard.plan_sha256"].decode() == answer.record["plan_sha256"]
    assert b"not for release without review" in metadata[b"steelyard.note"]


def test_weights_are_written_batch_by_batch(answer, tmp_path):
    alive = []

    class Watched(MadeWeights):
        def __call__(self):
            for batch in super().__call__():
                groups = Path(next(tmp_path.glob(".steelyard-*"))) / "weights.parquet"
                alive.append(groups.exists())
                yield batch

    write_answer(replace(answer, weights=Watched(batches=4)), tmp_path)
    assert alive == [True] * 4
    assert pq.ParquetFile(tmp_path / "weights.parquet").num_row_groups == 4


class Stop(Exception):
    pass


STEPS = [
    "effects.csv",
    "balance.csv",
    "weights.parquet",
    "report.html",
    "record.json",
    "fsync",
    "rename 1",
    "rename 4",
]


def break_at(monkeypatch, step, error):
    """Make one step of the writing fail with ``error``."""
    calls = {"rename": 0}
    original_write, original_replace = Path.write_bytes, os.replace

    def write_bytes(self, data):
        if self.name == step:
            original_write(self, data[: len(data) // 2])
            raise error
        return original_write(self, data)

    def replace_file(source, target):
        calls["rename"] += 1
        if step == f"rename {calls['rename']}":
            raise error
        return original_replace(source, target)

    def fsync(descriptor):
        if step == "fsync":
            raise error

    monkeypatch.setattr(Path, "write_bytes", write_bytes)
    monkeypatch.setattr(staging.os, "replace", replace_file)
    monkeypatch.setattr(staging.os, "fsync", fsync)
    if step == "weights.parquet":

        class Breaking(MadeWeights):
            def __call__(self):
                yield next(super().__call__())
                raise error

        return {"weights": Breaking()}
    return {}


@pytest.mark.parametrize(
    "error", [Stop(), KeyboardInterrupt(), OSError(errno.ENOSPC, "No space left on device")]
)
@pytest.mark.parametrize("step", STEPS)
def test_a_failure_at_any_step_leaves_no_folder_where_there_was_none(
    answer, tmp_path, monkeypatch, step, error
):
    broken = replace(answer, **break_at(monkeypatch, step, error))
    expected = OutputError if isinstance(error, OSError) else type(error)
    with pytest.raises(expected):
        write_answer(broken, tmp_path / "a" / "results")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("links", [True, False])
@pytest.mark.parametrize("step", STEPS)
def test_a_failure_at_any_step_leaves_earlier_results_as_they_were(
    answer, tmp_path, monkeypatch, step, links
):
    write_answer(answer, tmp_path)
    (tmp_path / "notes.txt").write_text("the analyst's own")
    (tmp_path / "record.json").unlink()
    before = contents(tmp_path)
    if not links:

        def refuse(*names):
            raise OSError(errno.EPERM, "no hard links here")

        monkeypatch.setattr(staging.os, "link", refuse)
        step = {"rename 1": "rename 5", "rename 4": "rename 8"}.get(step, step)
    broken = replace(answer, **break_at(monkeypatch, step, KeyboardInterrupt()))
    effects = answer.effects.table
    with pytest.raises(KeyboardInterrupt):
        write_answer(replace(broken, plan=replace(broken.plan, title="another")), tmp_path)
    assert contents(tmp_path) == before
    assert answer.effects.table is effects


def test_new_results_replace_earlier_ones_and_leave_other_files_alone(answer, tmp_path):
    write_answer(answer, tmp_path)
    (tmp_path / "notes.txt").write_text("the analyst's own")
    write_answer(replace(answer, warnings=("a new one",)), tmp_path)
    assert json.loads((tmp_path / "record.json").read_text())["warnings"] == ["a new one"]
    assert sorted(contents(tmp_path)) == sorted([*FILES, "notes.txt"])


def test_a_file_in_place_of_the_folder_is_refused_with_the_mend(answer, tmp_path):
    target = tmp_path / "results"
    target.write_text("x")
    with pytest.raises(OutputError, match="it is a file") as caught:
        write_answer(answer, target)
    assert caught.value.mend == "Choose a folder, not a file, for the results."
    with pytest.raises(OutputError):
        write_answer(answer, target / "below")
    assert target.read_text() == "x"


def test_a_folder_in_place_of_a_file_is_refused(answer, tmp_path):
    (tmp_path / "report.html").mkdir()
    with pytest.raises(OutputError, match=r"a folder there has the name report\.html"):
        write_answer(answer, tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["report.html"]


def test_trying_a_folder_leaves_nothing_behind(tmp_path):
    refuse_unusable(tmp_path / "a" / "b")
    assert list(tmp_path.iterdir()) == []
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError):
        refuse_unusable(tmp_path / "file")


def test_a_folder_one_may_not_write_to_is_named(tmp_path):
    if os.name != "posix" or os.geteuid() == 0:
        pytest.skip("root may write everywhere")
    tmp_path.chmod(0o500)
    try:
        with pytest.raises(OutputError, match="Permission denied"), staged(tmp_path / "results"):
            pass
    finally:
        tmp_path.chmod(0o700)


def test_a_full_disk_leaves_nothing_half_written(answer, tmp_path):
    if sys.platform != "linux" or os.geteuid() != 0 or shutil.which("mount") is None:
        pytest.skip("only root on Linux can mount a tiny disk")
    disk = tmp_path / "disk"
    disk.mkdir()
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=64k", "tmpfs", str(disk)], capture_output=True
    )
    if mounted.returncode:
        pytest.skip(f"no tmpfs can be mounted here: {mounted.stderr.decode().strip()}")
    try:
        with pytest.raises(OutputError, match="No space left") as caught:
            write_answer(replace(answer, weights=MadeWeights(batches=400)), disk / "results")
        assert caught.value.mend.startswith("Free some space")
        assert list(disk.iterdir()) == []
    finally:
        subprocess.run(["umount", str(disk)], check=True)
