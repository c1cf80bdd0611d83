import errno
import json
import os
import shutil
import subprocess

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

from steelyard.errors import OutputError
from steelyard.plan import plan_keys, read_plan
from steelyard.report import write
from steelyard.report.toml_text import plan_text
from steelyard.report.write import BALANCE_COLUMNS, EFFECT_COLUMNS, write_answer
from steelyard.study import Study

FILES = {"effects.csv", "balance.csv", "weights.parquet", "report.html", "record.json"}


def test_the_five_files_say_what_the_answer_says(answer, tmp_path):
    out = tmp_path / "deep" / "out"
    assert {path.name for path in write_answer(answer, out)} == FILES == set(os.listdir(out))
    effects = pd.read_csv(out / "effects.csv")
    assert tuple(effects.columns) == EFFECT_COLUMNS
    np.testing.assert_array_equal(effects["estimate"], answer.effects.table["estimate"])
    balance = pd.read_csv(out / "balance.csv", keep_default_na=True)
    assert tuple(balance.columns) == BALANCE_COLUMNS
    np.testing.assert_array_equal(balance["smd_after"], answer.balance.table["smd_after"])
    weights = pq.read_table(out / "weights.parquet")
    assert weights.column_names == [
        *("row", "propensity", "sampling_weight"),
        *("balancing_weight", "combined_weight", "in_domain"),
    ]
    assert weights["row"].to_pylist() == list(range(answer.checkup.files["rows"].sum()))
    metadata = weights.schema.metadata
    assert json.loads(metadata[b"steelyard.plan"]) == answer.record["plan"]
    assert metadata[b"steelyard.plan_sha256"].decode() == answer.record["plan_sha256"]
    record = json.loads((out / "record.json").read_text())
    assert record["inputs"][0]["file"] == "household_survey.parquet"
    assert len(record["inputs"][0]["sha256"]) == 64
    assert os.listdir(tmp_path / "deep") == ["out"]


def test_the_same_answer_is_the_same_bytes(answer, tmp_path):
    write_answer(answer, tmp_path / "1")
    write_answer(answer, tmp_path / "2")
    for name in FILES:
        assert (tmp_path / "1" / name).read_bytes() == (tmp_path / "2" / name).read_bytes(), name


def test_the_plan_in_the_report_is_the_plan(answer, tmp_path):
    (tmp_path / "plan.toml").write_text(plan_text(answer.record["plan"]))
    again = Study(**read_plan(tmp_path / "plan.toml"))
    assert plan_keys(again) == answer.record["plan"]
    odd = {
        "title": 'quotes " and \\ and é\n',
        "data": {"missing": {"odd name": [1, "x"]}},
        "x": 1.5,
        "y": True,
    }
    import tomllib

    assert tomllib.loads(plan_text(odd)) == odd


@pytest.mark.parametrize("step", ["_csv", "_weights", "report_html", "_record", "_settle"])
@pytest.mark.parametrize("error", [OSError(errno.ENOSPC, "No space left on device"), KeyboardInterrupt()])
@pytest.mark.parametrize("before", [True, False])
def test_whatever_interrupts_leaves_what_was_there(answer, tmp_path, monkeypatch, step, error, before):
    out = tmp_path / "parent" / "out"
    if before:
        out.mkdir(parents=True)
        (out / "effects.csv").write_text("earlier")
        (out / "notes.txt").write_text("mine")

    def fail(*_):
        raise error

    monkeypatch.setattr(write, step, fail)
    with pytest.raises(OutputError if isinstance(error, OSError) else KeyboardInterrupt):
        write_answer(answer, out)
    if before:
        assert sorted(os.listdir(out)) == ["effects.csv", "notes.txt"]
        assert (out / "effects.csv").read_text() == "earlier"
        assert os.listdir(out.parent) == ["out"]
    else:
        assert os.listdir(tmp_path) == []


def test_an_interrupt_between_two_renames_puts_the_old_files_back(answer, tmp_path, monkeypatch):
    out = tmp_path / "out"
    write_answer(answer, out)
    old = {name: (out / name).read_bytes() for name in FILES}
    (out / "effects.csv").write_text("mine")
    moved = type(out).rename

    def interrupted(self, target):
        if (
            self.name == "report.html"
            and target.parent == out
            and ".part" in str(self)
            and "old" not in str(self)
        ):
            raise KeyboardInterrupt
        return moved(self, target)

    monkeypatch.setattr(type(out), "rename", interrupted)
    with pytest.raises(KeyboardInterrupt):
        write_answer(answer, out)
    monkeypatch.undo()
    assert (out / "effects.csv").read_text() == "mine"
    for name in FILES - {"effects.csv"}:
        assert (out / name).read_bytes() == old[name]
    assert os.listdir(tmp_path) == ["out"]


def test_results_replace_earlier_ones_and_leave_other_files_alone(answer, tmp_path):
    (tmp_path / "effects.csv").write_text("earlier")
    (tmp_path / "notes.txt").write_text("mine")
    write_answer(answer, tmp_path)
    assert set(os.listdir(tmp_path)) == FILES | {"notes.txt"}
    assert (tmp_path / "effects.csv").read_text().startswith("outcome,")


def test_a_file_in_the_way_is_told(answer, tmp_path):
    (tmp_path / "out").write_text("")
    with pytest.raises(OutputError, match="is a file"):
        write_answer(answer, tmp_path / "out")


@pytest.mark.skipif(
    os.geteuid() != 0 or not shutil.which("mount"), reason="a small file system needs root to mount it"
)
def test_a_disk_that_is_really_full(answer, tmp_path):
    small = tmp_path / "small"
    small.mkdir()
    if subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=300k", "tmpfs", small], capture_output=True
    ).returncode:
        pytest.skip("this machine does not let a small file system be mounted")
    try:
        with pytest.raises(OutputError, match=r"cannot be written.*Free some space"):
            write_answer(answer, small / "out")
        assert os.listdir(small) == []
    finally:
        subprocess.run(["umount", small], check=True)
