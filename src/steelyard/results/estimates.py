"""A vector of estimates with its design-based covariance, spoken as statsmodels speaks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from types import SimpleNamespace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats
from statsmodels.base.model import LikelihoodModelResults
from statsmodels.iolib.summary2 import Summary

from steelyard.design.linearization import standard_errors
from steelyard.estimate.linear import quadratic_form

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class JointTest:
    """A joint test that several quantities are zero.

    Attributes
    ----------
    kind : "Wald F" or "chi-square"
    statistic : float
        NaN where the design has too few degrees of freedom for the test, or nothing is left to test.
    df : (numerator, denominator)
        The denominator is None for a chi-square test.
    p_value : float
    """

    kind: str
    statistic: float
    df: tuple[float, float | None]
    p_value: float


def wald_f(values: Floats, covariance: Floats, df: float) -> JointTest:
    """Return the adjusted Wald F test that ``values`` (q,) are zero, with ``df`` design degrees of freedom.

    Notes
    -----
    ``F = (df - q + 1) / (df q) * v' C^- v`` on ``(q, df - q + 1)`` degrees of freedom, with ``q`` the rank of
    ``C`` (Korn & Graubard 1990). Redundant entries, as the last level of a category, add nothing.
    """
    form, rank = quadratic_form(values, covariance)
    left = df - rank + 1
    if rank == 0 or left < 1:
        return JointTest("Wald F", np.nan, (float(rank), float(max(left, 0))), np.nan)
    statistic = form * left / (df * rank)
    return JointTest("Wald F", statistic, (float(rank), left), float(stats.f.sf(statistic, rank, left)))


def chi_square(values: Floats, covariance: Floats) -> JointTest:
    """Return the chi-square test that ``values`` (q,) are zero: ``v' C^- v`` on the rank of ``C``."""
    form, rank = quadratic_form(values, covariance)
    if rank == 0:
        return JointTest("chi-square", np.nan, (0.0, None), np.nan)
    return JointTest("chi-square", form, (float(rank), None), float(stats.chi2.sf(form, rank)))


class EstimateResults:
    """Estimates with a design-based covariance and t inference on the design's degrees of freedom.

    Names and meanings are those of statsmodels results: ``params``, ``bse``, ``tvalues``, ``pvalues``,
    ``df_resid``, ``cov_params()``, ``conf_int()``, ``t_test()``, ``wald_test()``, ``summary()``.

    Parameters
    ----------
    params : (k,) on the scale on which they are estimated (log for ratios and odds ratios)
    covariance : (k, k)
    names : k texts
    df : float
        PSUs minus strata.
    title : what the estimates are
    table : frame, optional
        The same as a table for readers; by default made from the estimates.
    confidence : float
        Of the intervals in the default table.
    """

    def __init__(
        self,
        params: Floats,
        covariance: Floats,
        names: Sequence[str],
        df: float,
        *,
        title: str = "",
        table: pd.DataFrame | None = None,
        confidence: float = 0.95,
    ) -> None:
        self.names = tuple(names)
        self.title = title
        self.df_resid = float(df)
        self._covariance = np.asarray(covariance, dtype=np.float64)
        self.params = pd.Series(params, index=list(names), name="estimate", dtype=np.float64)
        self.bse = pd.Series(standard_errors(self._covariance), index=list(names), name="std_error")
        self.table = self._default_table(confidence) if table is None else table

    @property
    def tvalues(self) -> pd.Series[float]:
        """Estimates over their standard errors; NaN where the standard error is zero."""
        return (self.params / self.bse.where(self.bse > 0)).rename("statistic")

    @property
    def pvalues(self) -> pd.Series[float]:
        """Two-sided p-values of the t tests that each estimate is zero."""
        p_values = t_p_values(self.tvalues.to_numpy(), self.df_resid)
        return pd.Series(p_values, index=self.params.index, name="p_value")

    def cov_params(self) -> pd.DataFrame:
        """Return the covariance of the estimates, (k, k)."""
        return pd.DataFrame(self._covariance, index=self.params.index, columns=self.params.index)

    def conf_int(self, alpha: float = 0.05) -> pd.DataFrame:
        """Return t intervals of level ``1 - alpha``; columns 0 and 1 are the limits."""
        half = t_quantile(1 - alpha / 2, self.df_resid) * self.bse
        return pd.DataFrame({0: self.params - half, 1: self.params + half})

    def t_test(self, r_matrix: Any) -> Any:
        """Return statsmodels' t test of linear restrictions: a matrix, or text such as ``"a = b"``."""
        return self._statsmodels().t_test(r_matrix)

    def wald_test(self, r_matrix: Any, use_f: bool = True) -> Any:
        """Return statsmodels' Wald test of linear restrictions, F on the design's degrees of freedom."""
        return self._statsmodels().wald_test(r_matrix, use_f=use_f, scalar=True)

    def summary(self) -> Summary:
        """Return a table to print."""
        summary = Summary()
        summary.add_title(self.title)
        frame = self._default_table(0.95).set_index("name")
        summary.add_df(frame, float_format="%.4f")
        summary.add_text(f"Design-based standard errors; t on {self.df_resid:g} degrees of freedom.")
        return summary

    def _default_table(self, confidence: float) -> pd.DataFrame:
        limits = self.conf_int(1 - confidence)
        return pd.DataFrame(
            {
                "name": list(self.names),
                "estimate": self.params.to_numpy(),
                "std_error": self.bse.to_numpy(),
                "ci_low": limits[0].to_numpy(),
                "ci_high": limits[1].to_numpy(),
                "statistic": self.tvalues.to_numpy(),
                "p_value": self.pvalues.to_numpy(),
            }
        )

    def _statsmodels(self) -> Any:
        names = list(self.names)
        model = SimpleNamespace(
            exog_names=names, data=SimpleNamespace(cov_names=names, xnames=names, param_names=names)
        )
        results = LikelihoodModelResults(
            model, self.params.to_numpy(), normalized_cov_params=self._covariance, scale=1.0, use_t=True
        )
        results.df_resid = self.df_resid
        return results


def t_quantile(probability: float, df: float) -> float:
    """Return the quantile of Student's t; NaN without degrees of freedom."""
    return float(stats.t.ppf(probability, df)) if df > 0 else float("nan")


def t_p_values(statistic: Floats, df: float) -> Floats:
    """Return two-sided p-values of t statistics; NaN without degrees of freedom."""
    if df <= 0:
        return np.full_like(statistic, np.nan, dtype=np.float64)
    return np.asarray(2 * stats.t.sf(np.abs(statistic), df))
