"""Sentences as they may leave the house: messages of the check-up and warnings, with small counts taken out.

The messages are written for the analyst, who may see every count. What is replaced here are their turns of
phrase; a test sends every message of the house that counts rows through these rules.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

_NUMBER = r"(?P<n>\d{1,3}(?:,\d{3})+|\d+)"
_ROWS = re.compile(
    rf"(?<![\d.,]){_NUMBER}(?P<after> (?:of (?:the )?[\d,]+ )?(?:(?:exposed|reference) )?row(?:\(s\)|s)?\b)"
)
_SHARE_OF_GROUP = re.compile(
    r"(?P<share>\d+(?:\.\d+)?)% of the (?P<group>exposed|reference|domain)(?P<after>(?: rows)?)"
)
_NAMED_STRATA = re.compile(r"(ha(?:ve|s) no (?:exposed|reference) rows): .*\.$", re.DOTALL)
_EFFECTIVE = re.compile(r"count for [\d.,]+ rows")
_LEFT_OUT = re.compile(rf"^{_NUMBER} of the (?P<all>[\d,]+) rows of the domain \([\d.]+%\)")


@dataclass(frozen=True)
class TextRules:
    """What must not be said.

    ``rows`` maps the groups to their rows; ``hidden_terms`` are the labels of hidden rows of the balance
    table.
    """

    minimum: int
    rows: Mapping[str, int]
    groups_hidden: bool
    hidden_terms: tuple[str, ...]

    def released(self, text: str) -> str:
        """Return the text with small counts, and what would give them away, replaced."""
        if self.minimum == 0:
            return text
        text = _NAMED_STRATA.sub(r"\1 (not named here).", text)
        text = _LEFT_OUT.sub(self._left_out, text)
        text = _SHARE_OF_GROUP.sub(self._share, text)
        text = _ROWS.sub(self._rows, text)
        if self.groups_hidden:
            text = _EFFECTIVE.sub("count for few rows", text)
        for label in self.hidden_terms:
            parts = re.split(rf"(?<={re.escape(label)}) \(-?\d+\.\d+\)", text)
            text = " (hidden)".join(parts)
        return text

    def _rows(self, found: re.Match[str]) -> str:
        after = found["after"]
        if self.groups_hidden and ("exposed" in after or "reference" in after):
            return f"few{after}"
        return f"fewer than {self.minimum}{after}" if 0 < _whole(found["n"]) < self.minimum else found[0]

    def _left_out(self, found: re.Match[str]) -> str:
        left, whole = _whole(found["n"]), _whole(found["all"])
        if min(left, whole - left) >= self.minimum:
            return found[0]
        return "Many rows of the domain"

    def _share(self, found: re.Match[str]) -> str:
        group = found["group"]
        rows = sum(self.rows.values()) if group == "domain" else self.rows[group]
        # The share is rounded to a tenth of a per cent.
        fewest = (float(found["share"]) - 0.05) / 100 * rows
        if 0 < fewest < self.minimum or (self.groups_hidden and group != "domain"):
            start = "A" if found.start() == 0 else "a"
            return f"{start} small share of the {group}{found['after']}"
        return found[0]


def _whole(text: str) -> int:
    return int(text.replace(",", ""))
