"""The command line as a user meets it: in a process of its own."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import pandas as pd
import pytest

from steelyard.plan import read_plan

EXAMPLE = Path(__file__).parents[1] / "examples" / "piped-water"
PLAN = str(EXAMPLE / "study.toml")


def steelyard(*arguments, **changes):
    return subprocess.run(
        [sys.executable, "-m", "steelyard.app", *map(str, arguments)],
        capture_output=True,
        text=True,
        env={**os.environ, "COLUMNS": "120", "TERM": "dumb", **changes},
        check=False,
    )


def test_run_writes_the_files_and_prints_a_summary(tmp_path):
    done = steelyard("run", PLAN, "--out", tmp_path / "out", "--workers", "2")
    assert done.returncode == 0, done.stderr
    assert sorted(os.listdir(tmp_path / "out")) == [
        *("balance.csv", "effects.csv", "record.json"),
        *("report.html", "weights.parquet"),
    ]
    effects = pd.read_csv(tmp_path / "out" / "effects.csv")
    assert f"−{abs(effects['estimate'][0]):.2f}" in done.stdout
    assert "Largest |SMD|" in done.stdout
    assert "unmeasured confounding" in done.stdout
    assert "\x1b[" not in done.stdout + done.stderr
    assert not done.stderr


def test_check_audits_and_estimates_nothing(tmp_path):
    done = steelyard("check", PLAN)
    assert done.returncode == 0, done.stderr
    for text in (
        "rows in the extract",
        "design effect of weighting",
        "outside the domain",
        "Ziskel Steppe",
        "note",
    ):
        assert text in done.stdout
    refused = Path(PLAN).read_text().replace('"collapse"', '"refuse"')
    refused = refused.replace("household_survey.parquet", str(EXAMPLE / "household_survey.parquet"))
    (tmp_path / "study.toml").write_text(refused)
    done = steelyard("check", tmp_path / "study.toml")
    assert done.returncode == 1
    assert re.search(r"error\s+1 stratum\(s\) have one PSU", done.stdout)
    done = steelyard("run", tmp_path / "study.toml", "--out", tmp_path / "out")
    assert done.returncode == 2
    assert "single_psu" in done.stderr
    assert not (tmp_path / "out").exists()


def test_outline_guesses_and_writes_a_plan_to_edit(tmp_path):
    done = steelyard("outline", EXAMPLE / "household_survey.parquet", "--plan", tmp_path / "new.toml")
    assert done.returncode == 0, done.stderr
    assert re.search(r"weight\s+person_weight", done.stdout)
    keys = tomllib.loads((tmp_path / "new.toml").read_text())
    assert keys["design"]["weight"] == "person_weight"
    assert keys["design"]["clusters"] == ["area", "household"]
    assert keys["design"]["population"] == ["areas_in_stratum"]
    read_plan(tmp_path / "new.toml")
    again = steelyard("outline", EXAMPLE / "household_survey.parquet", "--plan", tmp_path / "new.toml")
    assert again.returncode == 2
    assert "does not exist" in again.stderr


def test_errors_are_a_message_and_a_mend_without_a_traceback(tmp_path):
    for arguments, words in (
        (("run", tmp_path / "none.toml", "--out", tmp_path), "no plan file"),
        (("outline", tmp_path / "none.parquet"), "no file"),
    ):
        done = steelyard(*arguments)
        assert done.returncode == 2
        assert words in done.stderr
        assert "Traceback" not in done.stderr
    done = steelyard("check", tmp_path / "none.toml", "--trace")
    assert "Traceback" in done.stderr
    assert steelyard("run", PLAN).returncode == 2
    assert steelyard("rum").returncode == 2


def test_help_and_version():
    for arguments in ((), ("--help",), ("run", "--help"), ("check", "--help"), ("outline", "--help")):
        done = steelyard(*arguments)
        assert "Usage" in done.stdout + done.stderr, arguments
    assert re.fullmatch(r"steelyard \d+\.\d+\.\d+\n", steelyard("--version").stdout)


@pytest.mark.parametrize("delay", [0.6, 1.5, 2.5])
def test_an_interrupt_leaves_nothing_behind(tmp_path, delay):
    process = subprocess.Popen(
        [sys.executable, "-m", "steelyard.app", "run", PLAN, "--out", str(tmp_path / "out")],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    time.sleep(delay)
    process.send_signal(signal.SIGINT)
    process.communicate(timeout=60)
    if process.returncode == 0:
        assert len(os.listdir(tmp_path / "out")) == 5
    else:
        assert os.listdir(tmp_path) == []


def test_a_missing_extra_is_told(tmp_path):
    (tmp_path / "typer.py").write_text("raise ImportError('no typer', name='typer')")
    path = os.pathsep.join([str(tmp_path), os.environ.get("PYTHONPATH", "")])
    done = steelyard("--version", PYTHONPATH=path)
    assert done.returncode == 2
    assert "pip install 'steelyard[app]'" in done.stderr
