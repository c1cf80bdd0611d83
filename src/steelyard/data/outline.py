"""A first look at an extract: its columns, what may be design columns and why, and a plan to edit."""

from __future__ import annotations

import json
import re
from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa

from steelyard.data.source import Extract
from steelyard.data.values import level_text, values_of

LOOKED_AT = 65_536
LEVELS_COUNTED = 1_000
REPLICATES = 8


@dataclass(frozen=True)
class Guess:
    """A column that may play a part in the design: the part, the column, and why it may."""

    part: str
    column: str
    reason: str


@dataclass(frozen=True)
class Outline:
    """A first look at an extract.

    Attributes
    ----------
    rows, looked_at : rows in the extract, and how many of them were looked at
    columns : frame
        ``column``, ``type``, ``kind``, ``missing`` (share), ``distinct`` (count, or text beyond 1,000),
        ``values`` (range of a number, first levels of a category).
    guesses : tuple of Guess
    plan_text : a TOML plan to edit; "?" stands where only the analyst knows
    """

    rows: int
    looked_at: int
    columns: pd.DataFrame
    guesses: tuple[Guess, ...]
    plan_text: str


def outline(extract: Extract, file_names: tuple[str, ...] = ()) -> Outline:
    """Look at the first 65,536 rows of an extract; ``file_names`` go into the plan to edit."""
    _, table = next(extract.read(list(extract.columns), LOOKED_AT))
    records = [_column(name, extract.columns[name], table.column(name)) for name in extract.columns]
    columns = pd.DataFrame.from_records(records)
    guesses = tuple(_guesses(columns, table))
    return Outline(extract.rows, table.num_rows, columns, guesses, _plan_text(columns, guesses, file_names))


def _column(name: str, kind: str, column: pa.ChunkedArray) -> dict[str, object]:
    record: dict[str, object] = {"column": name, "type": str(column.type), "kind": kind}
    if kind == "other":
        return {**record, "missing": column.null_count / len(column), "distinct": "", "values": ""}
    values = values_of(column, ())
    missing = np.asarray(pd.isna(values))
    if isinstance(values, pd.Categorical):
        levels = list(values.categories)
        shown = ", ".join(map(str, levels[:4])) + (", ..." if len(levels) > 4 else "")
        return {
            **record,
            "type": "text",
            "missing": missing.mean(),
            "distinct": str(len(levels)),
            "values": shown,
        }
    present = values[~missing]
    distinct = len(np.unique(present))
    told = f"{distinct:,}" if distinct <= LEVELS_COUNTED else f"over {LEVELS_COUNTED:,}"
    shown = f"{level_text(present.min())} to {level_text(present.max())}" if len(present) else ""
    return {**record, "missing": missing.mean(), "distinct": told, "values": shown}


def _guesses(columns: pd.DataFrame, table: pa.Table) -> list[Guess]:
    found: list[Guess] = []
    families: dict[str, list[str]] = {}
    for name in columns.loc[columns["kind"] == "number", "column"]:
        numbered = re.fullmatch(r"(.*?)(\d+)", name)
        if numbered:
            families.setdefault(numbered[1], []).append(name)
    replicates = {
        p: names for p, names in families.items() if len(names) >= REPLICATES and _like_weights(names, table)
    }
    in_family = {name for names in replicates.values() for name in names}
    for row in columns.itertuples():
        lower = row.column.lower()
        if row.column in in_family or row.kind == "other":
            continue
        if (
            row.kind == "number"
            and re.search(r"weight|wgt|(^|_)wt(s|$|_)", lower)
            and _positive(table, row.column)
        ):
            found.append(Guess("weight", row.column, "its name speaks of a weight, and it is never negative"))
        elif re.search(r"strat", lower):
            found.append(Guess("strata", row.column, "its name speaks of strata"))
        elif re.search(
            r"psu|cluster|(^|_)area(_id)?$|(^|_)ea($|_)|segment|household(_id)?$|(^|_)hh(id)?($|_)", lower
        ):
            if "_in_" in lower:
                found.append(
                    Guess("population", row.column, "its name speaks of a number of units in a unit above")
                )
            else:
                found.append(
                    Guess("clusters", row.column, "its name speaks of areas, clusters or households")
                )
        elif "_in_" in lower and row.kind == "number":
            found.append(
                Guess("population", row.column, "its name speaks of a number of units in a unit above")
            )
    for prefix, names in replicates.items():
        found.append(
            Guess(
                "replicate weights",
                f"{prefix}*",
                f"{len(names)} numbered columns, never negative, of like size",
            )
        )
    return found


def _positive(table: pa.Table, name: str) -> bool:
    values = np.asarray(values_of(table.column(name), ()))
    return bool(np.nanmin(values, initial=np.inf) >= 0)


def _like_weights(names: list[str], table: pa.Table) -> bool:
    means = [float(np.nanmean(np.asarray(values_of(table.column(name), ())))) for name in names[:REPLICATES]]
    return all(_positive(table, n) for n in names[:REPLICATES]) and 0 < max(means) < 2 * max(
        min(means), 1e-300
    )


def _plan_text(columns: pd.DataFrame, guesses: tuple[Guess, ...], files: tuple[str, ...]) -> str:
    def guessed(part: str) -> list[str]:
        return [guess.column for guess in guesses if guess.part == part]

    weight = (guessed("weight") or ["?"])[0]
    two_valued = [row.column for row in columns.itertuples() if row.distinct == "2" and row.kind != "other"]
    lines = [
        "# A plan to edit. Every guess below was made from names and values alone: check each against the",
        "# survey's documentation. Replace each ? and delete what does not apply.",
        'title = "?"',
        "",
        "[data]",
        f"files = {_list(files or ('?',))}",
        '# domain = "age >= 6 and age <= 14"   # the subpopulation asked about; leave out for all rows',
        "# [data.missing]",
        "# income = [9998, 9999]               # codes that mean 'no answer'",
        "",
        "[design]",
        f"weight = {_text(weight)}",
        _guessed_line("strata", guessed("strata")),
        _guessed_line("clusters", guessed("clusters")) + "   # from the first stage down: check the order",
        _guessed_line("population", guessed("population")) + "   # one a stage, if the producer gives them",
        '# single_psu = "collapse"             # refuse, recentre, collapse or self-representing',
        "",
        "[exposure]",
        f"# Columns with two values: {', '.join(two_valued[:12]) or 'none seen'}.",
        'formula = "? ~ ?"                    # exposure ~ what drives both exposure and outcome',
        'estimand = "ATE"                     # ATE, ATT, ATC or ATO',
        "",
        "[[outcome]]",
        'name = "?"',
        'family = "gaussian"                  # gaussian, binomial or poisson',
        'measure = "difference"               # difference, ratio or odds-ratio',
    ]
    return "\n".join(lines) + "\n"


def _guessed_line(key: str, names: list[str]) -> str:
    return f"{key} = {_list(tuple(names))}" if names else f'# {key} = ["?"]'


def _list(names: tuple[str, ...]) -> str:
    return "[" + ", ".join(map(_text, names)) + "]"


def _text(name: str) -> str:
    return json.dumps(name, ensure_ascii=False)
