"""The functions that a formula in a plan may call, and how: a fixed list."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Signature:
    """How a function may be called: from ``least`` to ``most`` arguments, and by keyword.

    The first ``data`` arguments are computed from columns; all others, and the keywords, are constants.
    The trap is numpy, whose functions take one argument more than a formula needs and write into it.
    """

    data: int
    least: int
    most: int
    keywords: frozenset[str] = frozenset()


_KNOTS = frozenset({"df", "knots", "lower_bound", "upper_bound"})
_SCALE = frozenset({"center", "rescale", "ddof"})
NUMBERS = {
    **dict.fromkeys(
        ("log", "log10", "log2", "log1p", "exp", "expm1", "sqrt", "abs", "sign", "floor"), Signature(1, 1, 1)
    ),
    **dict.fromkeys(("minimum", "maximum"), Signature(2, 2, 2)),
    "clip": Signature(3, 3, 3),
}
SCALES = {
    "center": Signature(1, 1, 1),
    "standardize": Signature(1, 1, 1, _SCALE),
    "scale": Signature(1, 1, 1, _SCALE),
}
SPLINES = {
    "bs": Signature(1, 1, 2, _KNOTS | {"degree", "include_intercept"}),
    "cr": Signature(1, 1, 2, _KNOTS | {"constraints"}),
    "cc": Signature(1, 1, 2, _KNOTS | {"constraints"}),
    "te": Signature(4, 1, 4, frozenset({"constraints"})),
}
CONTRASTS = {
    "Treatment": Signature(0, 0, 1, frozenset({"reference"})),
    "Sum": Signature(0, 0, 1, frozenset({"omit"})),
    "Poly": Signature(0, 0, 1, frozenset({"scores"})),
    "Diff": Signature(0, 0, 0),
    "Helmert": Signature(0, 0, 0),
}
FUNCTIONS = {
    **NUMBERS,
    **SCALES,
    **SPLINES,
    **CONTRASTS,
    "C": Signature(1, 1, 2, frozenset({"contrast", "levels"})),
    "I": Signature(1, 1, 1),
    "Q": Signature(0, 1, 1),
}

# What patsy has to be given; the other functions are its own.
NUMERIC = {name: getattr(np, name) for name in NUMBERS}
ALLOWED = (
    "A formula may use columns, + - * / : and ( ), comparisons, and the functions "
    f"{', '.join(sorted(FUNCTIONS))}. "
    'A column whose name is not a plain word is written Q("odd name").'
)
