"""Guesses at the design columns of an extract, from their names and their values, each with its reason."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

FEWEST_REPLICATES = 8
MUCH_MISSING = 0.05
MOST_NEGATIVE_CODES = 4
LEVELS_OF_NO_ANSWER = frozenset(
    {
        "",
        ".",
        "-",
        "?",
        "na",
        "n/a",
        "nan",
        "none",
        "missing",
        "unknown",
        "refused",
        "no answer",
        "not stated",
    }
    | {"don't know", "dont know", "do not know", "dk", "not applicable", "not available", "no response"}
)


@dataclass(frozen=True)
class ColumnSummary:
    """A column at first sight.

    ``missing`` is a share; ``distinct`` counts values (-1 unknown). Numbers have ``low``, ``high``, ``mean``,
    ``whole`` (all are whole numbers) and ``numbers``, the distinct ones, sorted; of many only those at both
    ends. Categories have ``levels``, sorted; dates have the first and the last.
    """

    name: str
    stored: str
    kind: str
    missing: float
    distinct: int
    low: float = np.nan
    high: float = np.nan
    mean: float = np.nan
    whole: bool = False
    numbers: tuple[float, ...] = ()
    levels: tuple[str, ...] = ()


@dataclass(frozen=True)
class Guess:
    """Columns that may be one part of the design, and why.

    ``part`` is "weight", "strata", "clusters" (from the first stage down), "population" or
    "replicate weights". ``others`` are columns that came second.
    """

    part: str
    columns: tuple[str, ...]
    reason: str
    others: tuple[str, ...] = ()


def guess_design(columns: Sequence[ColumnSummary], rows: int) -> tuple[Guess, ...]:
    """Guess which columns are the design; ``rows`` is how many were looked at.

    A part that no column looks like has no guess.
    """
    families = _families(columns)
    numbered = {column.name for family in families for column in family}
    plain = [column for column in columns if column.name not in numbered]
    weight = _weight(plain)
    found = [
        weight,
        _strata(plain, rows),
        _clusters(plain, rows),
        _population(plain),
        _replicates(families, next((c for c in columns if weight and c.name == weight.columns[0]), None)),
    ]
    return tuple(guess for guess in found if guess is not None)


def no_answer_codes(column: ColumnSummary) -> tuple[float, ...] | tuple[str, ...]:
    """Return values of a column that look like codes for 'no answer'.

    Of a number: 9, 99, 999 ... and what stands just below them, where they lie beyond all other values;
    and -1, -9, -99 ... where no other value is negative.
    """
    if column.kind == "category":
        return tuple(level for level in column.levels if level.strip().lower() in LEVELS_OF_NO_ANSWER)
    if len(column.numbers) < 3:
        return ()
    high = {v for v in column.numbers if v >= 9 and re.fullmatch(r"9+[6-9]?|8+", f"{v:.0f}")}
    low = {v for v in column.numbers if re.fullmatch(r"-(?:[1-9]|9+[6-9]?|8+)", f"{v:.0f}")}
    rest = [v for v in column.numbers if v not in high and v not in low]
    if not rest:
        return ()
    beyond = {v for v in high if v > 1.5 * max(rest) and v >= max(rest) + 3}
    # A scale that runs below zero has more negative values than codes would be.
    below = low if min(rest) >= 0 and len(low) <= MOST_NEGATIVE_CODES else set()
    return tuple(sorted(beyond | below))


def unnamed_weights(columns: Sequence[ColumnSummary]) -> tuple[str, ...]:
    """Return columns whose values alone could be weights: positive, with decimals, nowhere missing."""
    return tuple(
        column.name
        for column in columns
        if column.kind == "number" and column.missing == 0 and column.low > 0 and not column.whole
    )


def _weight(columns: Sequence[ColumnSummary]) -> Guess | None:
    scored = []
    for column in columns:
        words = _words(column.name)
        named = any(
            word in _WEIGHT or re.fullmatch(r"(?!over|under|birth|body).*(weight|wgt)s?", word)
            for word in words
        )
        if (
            not named
            or words & _BODILY
            or column.kind != "number"
            or not column.low >= 0
            or column.distinct < 2
        ):
            continue
        if column.missing > MUCH_MISSING or (column.high <= 1 and column.whole):
            continue
        scored.append(((not column.whole) + bool(words & {"person", "final"}), column))
    if not scored:
        return None
    scored.sort(key=lambda pair: -pair[0])
    best = scored[0][1]
    decimals = "in whole numbers" if best.whole else "with decimals"
    missing = f"missing in {best.missing:.2%} of the rows" if best.missing else "nowhere missing"
    return Guess(
        "weight",
        (best.name,),
        f"its name speaks of a weight, it is never negative ({best.low:.4g} to {best.high:.4g}, {decimals}), and "
        f"it is {missing}",
        tuple(column.name for _, column in scored[1:]),
    )


def _strata(columns: Sequence[ColumnSummary], rows: int) -> Guess | None:
    found = [
        column
        for column in columns
        if any(word.startswith("strat") for word in _words(column.name))
        and _is_id(column)
        and 1 < column.distinct <= max(rows // 2, 1)
        and not _words(column.name) & _COUNTS
    ]
    if not found:
        return None
    best = found[0]
    return Guess(
        "strata",
        (best.name,),
        f"its name speaks of strata, it is nowhere missing, and it has {best.distinct:,} values",
        tuple(column.name for column in found[1:]),
    )


def _clusters(columns: Sequence[ColumnSummary], rows: int) -> Guess | None:
    stages: list[ColumnSummary] = []
    others: list[str] = []
    for names in _STAGES:
        found = [
            column
            for column in columns
            if _words(column.name) & names
            and _is_id(column)
            and 1 < column.distinct < rows
            and not _words(column.name) & _COUNTS
        ]
        # The name that says it first in the list of names says it best.
        found.sort(key=lambda column: "id" not in _words(column.name))
        if found:
            stages.append(found[0])
            others += [column.name for column in found[1:]]
    if not stages:
        return None
    sizes = ", ".join(f"{column.name} {column.distinct:,}" for column in stages)
    return Guess(
        "clusters",
        tuple(column.name for column in stages),
        f"their names speak of sampling units, they are nowhere missing, and their values recur (values: {sizes})",
        tuple(others),
    )


def _population(columns: Sequence[ColumnSummary]) -> Guess | None:
    found = [
        column
        for column in columns
        if ("fpc" in _words(column.name) or re.search(r"(?i)_in_(the_)?(stratum|strata)$", column.name))
        and column.kind == "number"
        and column.missing == 0
        and column.low >= 1
    ]
    if not found:
        return None
    return Guess(
        "population",
        (found[0].name,),
        f"its name speaks of a population count, and it is a number from {found[0].low:,.0f} to {found[0].high:,.0f}",
        tuple(column.name for column in found[1:]),
    )


def _families(columns: Sequence[ColumnSummary]) -> list[list[ColumnSummary]]:
    """Return families of numbered columns that could be replicate weights: many, complete, not negative."""
    by_stem: dict[str, list[tuple[int, ColumnSummary]]] = {}
    for column in columns:
        numbered = re.fullmatch(r"(.*?\D)(\d+)", column.name, flags=re.DOTALL)
        if numbered and column.kind == "number" and column.missing == 0 and column.low >= 0:
            by_stem.setdefault(numbered[1], []).append((int(numbered[2]), column))
    families = []
    for stem, members in by_stem.items():
        numbers = sorted(number for number, _ in members)
        unbroken = numbers == list(range(numbers[0], numbers[0] + len(numbers)))
        named = bool(re.search(r"(?i)rep|weight|wt|wgt|brr|jack|jk|boot|bs", stem))
        if len(members) >= FEWEST_REPLICATES and unbroken and named:
            families.append([column for _, column in sorted(members, key=lambda pair: pair[0])])
    return families


def _replicates(families: list[list[ColumnSummary]], weight: ColumnSummary | None) -> Guess | None:
    """Of the families, take the one whose means are nearest to the weight's, if they are near at all."""
    if not families:
        return None
    told = ""
    if weight is not None and weight.mean > 0:
        ratios = [float(np.mean([c.mean for c in family])) / weight.mean for family in families]
        place = int(np.argmin(np.abs(np.log(np.maximum(ratios, 1e-300)))))
        if not 0.5 < ratios[place] < 2:
            return None
        family, told = families[place], f", and their mean is {ratios[place]:.3g} times that of {weight.name}"
    else:
        family = families[0]
    return Guess(
        "replicate weights",
        tuple(column.name for column in family),
        f"{len(family)} numbered columns, nowhere missing or negative{told}",
    )


_WEIGHT = frozenset({"wt", "wts", "pwt", "fwt", "wtfinl", "expansion", "ponderation"})
_BODILY = frozenset(
    {"kg", "lb", "lbs", "body", "birth", "gram", "grams", "loss", "gain", "height", "child", "baby", "mother"}
)
_STAGES = (
    frozenset(
        {"psu", "psuid", "cluster", "clusters", "clusterid", "clust", "area", "ea", "segment", "village"}
    ),
    frozenset({"ssu", "household", "households", "householdid", "hh", "hhid", "hhnum", "dwelling"}),
)
# Words of counts and sizes: the number of areas is no area.
_COUNTS = frozenset(
    {"size", "number", "count", "total", "members", "in", "income", "head", "type", "weight", "wt"}
)


def _is_id(column: ColumnSummary) -> bool:
    return column.missing == 0 and (column.kind == "category" or (column.kind == "number" and column.whole))


def _words(name: str) -> frozenset[str]:
    """Return the words of a column's name, in lower case: of ``personWeight_2``, person, weight and 2."""
    return frozenset(_split(name))


def _split(name: str) -> Iterator[str]:
    for part in re.split(r"[^A-Za-z0-9]+|(?<=[a-z])(?=[A-Z])|(?<=[A-Za-z])(?=\d)", name):
        if part:
            yield part.lower()
