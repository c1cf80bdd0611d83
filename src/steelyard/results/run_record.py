"""What a run leaves on record: its plan, inputs, versions, how its variance was made, and how long it took."""

from __future__ import annotations

import hashlib
import json
import platform
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from importlib.metadata import version

import pandas as pd

from steelyard.keys import plan_keys
from steelyard.plan import Plan
from steelyard.results.variance_made import VarianceMade

PACKAGES = ("steelyard", "numpy", "pandas", "scipy", "statsmodels", "patsy", "pyarrow")


class Watch:
    """Seconds by stage of the work."""

    def __init__(self, before: Mapping[str, float] | None = None) -> None:
        self.seconds: dict[str, float] = dict(before or {})

    @contextmanager
    def __call__(self, stage: str) -> Iterator[None]:
        """Take the time of what is done inside."""
        start = time.perf_counter()
        try:
            yield
        finally:
            self.seconds[stage] = round(time.perf_counter() - start, 3)


def run_record(
    plan: Plan, files: pd.DataFrame, seconds: Mapping[str, float], told: tuple[str, ...], how: VarianceMade
) -> dict[str, object]:
    """Return what record.json says: plan, digests of inputs, versions, seed, variance, timings, warnings."""
    keys = plan_keys(plan)
    text = json.dumps(keys, sort_keys=True, ensure_ascii=False)
    return {
        "plan": keys,
        "plan_sha256": hashlib.sha256(text.encode()).hexdigest(),
        "inputs": files.to_dict("records"),
        "versions": {"python": platform.python_version(), **{name: version(name) for name in PACKAGES}},
        "seed": dict(how.details).get("seed"),
        "variance": how.record(),
        "seconds": dict(seconds),
        "warnings": list(told),
    }
