"""The plan that an outline hands over: TOML text to edit, with every guess in place and what to check beside it."""

from __future__ import annotations

import json
from collections.abc import Sequence

from steelyard.data.guesses import ColumnSummary, Guess, no_answer_codes, unnamed_weights

EXPOSURE, COVARIATES, OUTCOME, WEIGHT = "THE_EXPOSURE", "THE_COVARIATES", "THE_OUTCOME", "THE_WEIGHT"
NAMED_IN_COMMENTS = 8


def draft_plan(
    files: tuple[str, ...],
    columns: Sequence[ColumnSummary],
    guesses: Sequence[Guess],
    rows: int,
    looked_at: int,
) -> str:
    """Return a plan as TOML text. It is valid as it is; names that begin with ``THE_`` wait to be replaced.

    Parameters
    ----------
    files : names of the extract's files, or none for an extract in memory
    rows, looked_at : rows of the extract, and how many of them, from the first, the guesses rest on
    """
    by_part = {guess.part: guess for guess in guesses}
    seen = "all" if looked_at == rows else f"the first {looked_at:,} of"
    lines = [
        f"# A plan to edit. The guesses rest on {seen} {rows:,} rows: check each of them.",
        f"# Replace what begins with THE_: {_marks(by_part)}.",
        f"title = {toml_text('')}",
        "",
        "[data]",
        *_files(files),
        '# domain = "..."  # the subpopulation asked about, such as age >= 6 and age <= 14',
        "",
        *_missing(columns),
        "[design]",
        *_design(by_part, unnamed_weights(columns)),
        "",
        "[exposure]",
        *_exposed(columns),
        f"formula = {toml_text(f'{EXPOSURE} ~ {COVARIATES}')}  # as in piped ~ urban + C(region) + bs(wealth, df=4)",
        'estimand = "ATE"  # or ATT, ATC, ATO',
        "",
        "[[outcome]]",
        f"name = {toml_text(OUTCOME)}",
        'family = "gaussian"  # or binomial (0 and 1), poisson (counts)',
        'measure = "difference"  # or ratio; odds-ratio for binomial',
    ]
    return "\n".join(lines) + "\n"


def toml_text(text: str) -> str:
    """Return a text as a TOML basic string, on one line, whatever it holds."""
    # JSON leaves DEL as it is, which TOML forbids; all its escapes are TOML's as well.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _marks(by_part: dict[str, Guess]) -> str:
    marks = [EXPOSURE, COVARIATES, OUTCOME]
    return ", ".join([WEIGHT, *marks] if "weight" not in by_part else marks)


def _files(files: tuple[str, ...]) -> list[str]:
    if not files:
        return ["# files = [...]  # the extract was in memory; name its files, or give it to run()"]
    return [f"files = {_toml_list(files)}  # relative to this plan"]


def _missing(columns: Sequence[ColumnSummary]) -> list[str]:
    found = [(column.name, no_answer_codes(column)) for column in columns]
    lines = [
        f"# {toml_text(name)} = [{', '.join(_toml_value(code) for code in codes)}]"
        for name, codes in found
        if codes
    ]
    if not lines:
        return ["# [data.missing]  # codes that mean 'no answer', as in income = [9998, 9999]", ""]
    return [
        "# These values look like codes for 'no answer'. Where the questionnaire agrees, take the # away.",
        "[data.missing]",
        *lines,
        "",
    ]


def _design(by_part: dict[str, Guess], unnamed: Sequence[str]) -> list[str]:
    lines: list[str] = []
    weight = by_part.get("weight")
    if weight is None:
        lines.append("# No column is named like a sampling weight: name it.")
        if unnamed:
            lines.append(f"# Positive, with decimals and nowhere missing: {_some(unnamed)}.")
        lines.append(f"weight = {toml_text(WEIGHT)}")
    else:
        lines += [*_because(weight), f"weight = {toml_text(weight.columns[0])}"]
    for part, hint in (
        ("strata", '# strata = "..."  # no column looks like strata'),
        ("clusters", '# clusters = ["..."]  # no column looks like clusters; from the first stage down'),
        ("population", ""),
    ):
        guess = by_part.get(part)
        if guess is not None and (part != "population" or "clusters" in by_part):
            lines += [*_because(guess), f"{part} = {_toml_list(guess.columns)}"]
        elif hint:
            lines.append(hint)
    lines.append('single_psu = "refuse"  # or recentre, collapse, self-representing')
    if "replicate weights" in by_part:
        guess = by_part["replicate weights"]
        lines += [
            f"# {toml_text(guess.columns[0])} to {toml_text(guess.columns[-1])} look like replicate weights: "
            f"{_plain(guess.reason)}.",
            "# To use them, take the # away and write what their documentation says; with them strata and clusters",
            '# may be left out. Then set method = "supplied" under [variance].',
            "# [design.replicates]",
            f"# columns = {_columns(guess.columns)}",
            '# method = "..."  # jackknife, brr, fay, bootstrap, successive-difference',
            "# fay = 0.5  # for fay, its factor; factor, replicate_factors and df where they are stated",
        ]
    return lines


def _columns(names: Sequence[str]) -> str:
    """Return a pattern where the names differ in their last digits alone and hold no pattern themselves; else all."""
    stems = {name.rstrip("0123456789") for name in names}
    stem = stems.pop()
    return _toml_list(names) if stems or not stem or set(stem) & set("*?[") else toml_text(f"{stem}*")


def _because(guess: Guess) -> list[str]:
    lines = [f"# Check {_some(guess.columns)}: {_plain(guess.reason)}."]
    if guess.others:
        lines.append(f"# It could also be {_some(guess.others)}.")
    return lines


def _exposed(columns: Sequence[ColumnSummary]) -> list[str]:
    yes_or_no = [
        column.name
        for column in columns
        if (
            column.kind in ("number", "boolean")
            and {column.low, column.high} == {0, 1}
            and column.distinct == 2
        )
    ]
    if not yes_or_no:
        return ["# No column is 0 or 1: say which values to compare by exposed = ... and reference = ..."]
    return [f"# Columns of 0 and 1: {_some(yes_or_no)}."]


def _some(names: Sequence[str]) -> str:
    told = ", ".join(toml_text(name) for name in names[:NAMED_IN_COMMENTS])
    return told + (f" and {len(names) - NAMED_IN_COMMENTS} more" if len(names) > NAMED_IN_COMMENTS else "")


def _plain(text: str) -> str:
    """Return a text fit for a comment: a column's name in it may hold anything."""
    return toml_text(text)[1:-1].replace('\\"', '"')


def _toml_list(names: Sequence[str]) -> str:
    return f"[{', '.join(toml_text(name) for name in names)}]"


def _toml_value(value: str | float) -> str:
    return toml_text(value) if isinstance(value, str) else f"{value:.0f}"
