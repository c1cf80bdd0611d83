"""The command line, from a plan on disk to files, messages and exit codes."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
import time

import numpy as np
import pandas as pd
import pytest

from steelyard import app
from steelyard.errors import EstimationError
from steelyard.report import write
from steelyard.report.write import FILES

PLAN = """
title = "A study"
[data]
files = "survey.parquet"
domain = "age >= 6"
[design]
weight = "w"
strata = "h"
clusters = "psu"
[exposure]
formula = "a ~ x + C(region)"
[[outcome]]
name = "y"
[[outcome]]
name = "b"
family = "binomial"
measure = "ratio"
"""


def survey(n=1200):
    rng = np.random.default_rng(7)
    frame = pd.DataFrame({"h": np.arange(n) % 6, "psu": (np.arange(n) // 6) % 5, "x": rng.normal(size=n)})
    frame["region"] = rng.choice(["north", "south", "[bold]east[/bold]"], n)
    frame["age"] = rng.integers(0, 60, n)
    frame["w"] = np.exp(0.3 * rng.normal(size=n))
    frame["a"] = (rng.random(n) < 1 / (1 + np.exp(-0.6 * frame["x"]))).astype(int)
    frame["y"] = 1 + 0.5 * frame["a"] + frame["x"] + rng.normal(size=n)
    frame["b"] = (rng.random(n) < 0.3 + 0.2 * frame["a"]).astype(int)
    return frame


@pytest.fixture
def folder(tmp_path):
    survey().to_parquet(tmp_path / "survey.parquet")
    (tmp_path / "study.toml").write_text(PLAN, encoding="utf-8")
    return tmp_path


@pytest.fixture
def command(monkeypatch, capfd):
    """Run the command line; return the exit code and what was said."""

    def run(*arguments):
        monkeypatch.setattr(sys, "argv", ["steelyard", *map(str, arguments)])
        with pytest.raises(SystemExit) as left:
            app.main()
        said = capfd.readouterr()
        return left.value.code or 0, said.out, said.err

    return run


def test_run_writes_the_five_files_and_says_where(folder, command):
    code, out, err = command("run", folder / "study.toml", "--out", folder / "out", "--workers", 2)
    assert code == 0, err
    assert sorted(path.name for path in (folder / "out").iterdir()) == sorted(FILES)
    for name in FILES:
        assert str(folder / "out" / name) in out
    effects = pd.read_csv(folder / "out" / "effects.csv")
    assert f"{effects['estimate'][0]:.2f}" in out
    assert "odds" not in out
    assert "difference" in out
    assert "95% interval" in out
    assert "Effective sizes: exposed" in out
    assert "Traceback" not in err


def test_output_that_is_no_terminal_has_no_colours_and_no_bars(folder, command):
    _, out, err = command("run", folder / "study.toml", "--out", folder / "out")
    assert "\x1b" not in out + err
    assert "\r" not in out + err
    lines = err.splitlines()
    assert all(line.endswith(": done") for line in lines)
    assert len(lines) == len(set(lines))


def test_the_answer_is_the_same_for_any_number_of_workers(folder, command):
    for workers in (1, 3):
        assert (
            command("run", folder / "study.toml", "--out", folder / f"w{workers}", "--workers", workers)[0]
            == 0
        )
    for name in ("effects.csv", "balance.csv", "weights.parquet"):
        assert (folder / "w1" / name).read_bytes() == (folder / "w3" / name).read_bytes()


def test_the_printed_summary_hides_a_small_group(folder, command):
    frame = survey()
    frame.loc[frame.index[8:], "a"] = 0
    frame.loc[frame.index[:8], "a"] = 1
    frame.loc[frame.index[:8], "age"] = 10
    frame.to_parquet(folder / "survey.parquet")
    (folder / "study.toml").write_text(PLAN.replace("a ~ x + C(region)", "a ~ x"), encoding="utf-8")
    code, out, err = command("run", folder / "study.toml", "--out", folder / "out")
    assert code == 0, err
    assert "under 10" in out
    assert not re.search(r"Effective sizes:.*\d", out)
    assert "under 10" in (folder / "out" / "effects.csv").read_text()


def test_check_prints_the_check_up_and_estimates_nothing(folder, command, monkeypatch):
    code, out, _ = command("check", folder / "study.toml")
    assert code == 0
    for words in (
        "rows in the extract",
        "1,200",
        "outside the domain",
        "effective size",
        "Strata",
        "Missing",
    ):
        assert words in out
    assert not (folder / "out").exists()


def test_check_leaves_with_1_where_a_run_would_refuse(folder, command):
    frame = survey()
    frame.loc[frame["h"] == 0, "psu"] = 0
    frame.to_parquet(folder / "survey.parquet")
    code, out, _ = command("check", folder / "study.toml")
    assert code == 1
    assert "error: 1 stratum(s) have one PSU: 0." in out
    assert 'Set design.single_psu to "recentre"' in out


def test_a_refusal_is_a_message_and_its_mend_without_a_traceback(folder, command):
    (folder / "study.toml").write_text(PLAN.replace('weight = "w"', 'weight = "ww"'), encoding="utf-8")
    code, out, err = command("run", folder / "study.toml", "--out", folder / "out")
    assert code == 2
    assert 'Error: The plan names column "ww"' in err
    assert 'Did you mean "w"?' in err
    assert "Traceback" not in err
    assert out == ""
    assert not (folder / "out").exists()


def test_a_place_that_cannot_hold_results_is_refused_before_the_work(folder, command, monkeypatch):
    (folder / "out").write_text("a file")

    def fail(*arguments, **named):
        raise AssertionError("the work was begun")

    monkeypatch.setattr("steelyard.study.Study.run", fail)
    code, _, err = command("run", folder / "study.toml", "--out", folder / "out")
    assert code == 2
    assert "it is a file" in err
    assert "Choose a folder" in err


def test_an_interrupt_leaves_with_130_and_no_files(folder, command, monkeypatch):
    def interrupt(*arguments):
        raise KeyboardInterrupt

    monkeypatch.setattr(write, "_write_weights", interrupt)
    code, _, err = command("run", folder / "study.toml", "--out", folder / "out")
    assert code == 130
    assert "Interrupted" in err
    assert not (folder / "out").exists()


def test_a_defect_is_short_and_shows_its_place_on_request(folder, command, monkeypatch):
    def fail(*arguments, **named):
        raise ZeroDivisionError("by zero")

    monkeypatch.setattr("steelyard.study.Study.run", fail)
    arguments = ("run", folder / "study.toml", "--out", folder / "out")
    code, _, err = command(*arguments)
    assert code == 2
    assert "Unexpected ZeroDivisionError: by zero" in err
    assert "--trace" in err
    assert "Traceback" not in err
    code, _, err = command(*arguments, "--trace")
    assert code == 2
    assert "Traceback" in err


def test_a_refusal_can_show_its_place_too(folder, command, monkeypatch):
    def fail(*arguments, **named):
        raise EstimationError("no", mend="yes")

    monkeypatch.setattr("steelyard.study.Study.check", fail)
    assert "Traceback" in command("check", folder / "study.toml", "--trace")[2]


def test_outline_prints_columns_guesses_and_writes_a_plan_once(folder, command):
    code, out, _ = command("outline", folder / "survey.parquet")
    assert code == 0
    assert "1,200 rows, 9 columns" in out
    assert "[bold]east[/bold]" in out
    assert "clusters: psu" in out
    code, out, _ = command("outline", folder / "survey.parquet", "--plan", folder / "new.toml")
    assert code == 0
    assert 'files = ["survey.parquet"]' in (folder / "new.toml").read_text(encoding="utf-8")
    (folder / "new.toml").write_text("mine")
    code, _, err = command("outline", folder / "survey.parquet", "--plan", folder / "new.toml")
    assert code == 2
    assert "new.toml exists already" in err
    assert (folder / "new.toml").read_text() == "mine"


def test_a_plan_far_from_its_extract_is_said_to_need_the_path(folder, command):
    (folder / "plans").mkdir()
    _, out, _ = command("outline", folder / "survey.parquet", "--plan", folder / "plans" / "new.toml")
    assert "put its path into data.files" in out


def test_the_version_is_said(command):
    code, out, _ = command("--version")
    assert code == 0
    assert re.fullmatch(r"steelyard \d+\.\d+\.\d+\n", out)


def test_a_missing_option_is_named(folder, command):
    code, _, err = command("run", folder / "study.toml")
    assert code == 2
    assert "--out" in err


@pytest.mark.parametrize("package", ["typer", "rich", "matplotlib", "jinja2"])
def test_a_missing_extra_is_named_with_the_command_that_brings_it(package, folder):
    script = (
        f"import sys; sys.modules[{package!r}] = None\n"
        f"sys.argv = ['steelyard', 'run', {str(folder / 'study.toml')!r}, '--out', {str(folder / 'out')!r}]\n"
        "from steelyard.app import main; main()"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
    assert done.returncode == 2
    assert package in done.stderr
    assert "pip install 'steelyard[app]'" in done.stderr
    assert "Traceback" not in done.stderr
    assert not (folder / "out").exists()


@pytest.mark.skipif(os.name != "posix", reason="signals as POSIX has them")
def test_control_c_on_a_real_process_leaves_earlier_results_untouched(folder):
    (folder / "out").mkdir()
    for name in FILES:
        (folder / "out" / name).write_text("earlier")
    script = (
        "import sys, time\n"
        "from steelyard.report import write\n"
        "def slow(answer, path):\n"
        "    path.write_bytes(b'half')\n"
        "    print('writing', flush=True)\n"
        "    time.sleep(60)\n"
        "write._write_weights = slow\n"
        f"sys.argv = ['steelyard', 'run', {str(folder / 'study.toml')!r}, '--out', {str(folder / 'out')!r}]\n"
        "from steelyard.app import main; main()"
    )
    running = subprocess.Popen(
        [sys.executable, "-c", script], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    try:
        assert running.stdout.readline() == "writing\n"
        time.sleep(0.1)
        running.send_signal(signal.SIGINT)
        _, err = running.communicate(timeout=30)
    finally:
        running.kill()
    assert running.returncode == 130
    assert "Traceback" not in err
    assert {path.name: path.read_text() for path in (folder / "out").iterdir()} == dict.fromkeys(
        FILES, "earlier"
    )
