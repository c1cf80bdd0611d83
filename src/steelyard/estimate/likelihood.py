"""The likelihood of one row given its linear predictor: its slope and curvature, for any family and link.

Families and links are statsmodels'; this module adds what a weighted fit needs of them. It knows
nothing of weights, blocks or designs.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from statsmodels.genmod import families

Floats = NDArray[np.float64]

_FAMILIES = {
    "gaussian": families.Gaussian,
    "binomial": families.Binomial,
    "poisson": families.Poisson,
}
_LINKS = {
    "identity": families.links.Identity,
    "log": families.links.Log,
    "logit": families.links.Logit,
    "probit": families.links.Probit,
}
_CANONICAL = {("gaussian", "identity"), ("binomial", "logit"), ("poisson", "log")}


@dataclass(frozen=True)
class Likelihood:
    """A family and a link, by name, so that a kernel that holds it can travel.

    Notes
    -----
    With mean ``mu = g^-1(eta)``, variance function ``V`` and link ``g``, the slope of a row's
    log-likelihood in ``eta`` is ``(y - mu) / (V(mu) g'(mu))`` and its negative second derivative

        I = [1 + (y - mu) (V'(mu) g'(mu) + V(mu) g''(mu)) / (V(mu) g'(mu))] / (V(mu) g'(mu)^2),

    whose expectation is ``1 / (V g'^2)`` (McCullagh & Nelder 1989, section 2.5). For a canonical
    link both are ``V(mu)`` and the slope is ``y - mu``.
    """

    family: str
    link: str

    @property
    def canonical(self) -> bool:
        """Whether the link is the family's canonical one."""
        return (self.family, self.link) in _CANONICAL

    def mean(self, eta: Floats) -> Floats:
        """Return ``g^-1(eta)``, of the shape of ``eta``."""
        if self.link == "logit":
            return _expit(eta)
        return np.asarray(_link(self.link).inverse(eta))

    def odds(self, eta: Floats) -> Floats:
        """Return ``g^-1(eta) / (1 - g^-1(eta))`` as a new array, for a logit or probit link."""
        with np.errstate(over="ignore", divide="ignore"):
            if self.link == "logit":
                return np.asarray(np.exp(eta))
            # The link is symmetric, so 1 - e keeps its digits as the mean of -eta.
            return np.asarray(self.mean(eta) / self.mean(-eta))

    def mean_slope(self, eta: Floats) -> Floats:
        """Return ``d mean / d eta``, of the shape of ``eta``."""
        if self.link == "logit":
            return np.asarray(_expit(eta) * _expit(-eta))
        return np.asarray(_link(self.link).inverse_deriv(eta))

    def predictor(self, mean: Floats) -> Floats:
        """Return ``g(mean)``."""
        return np.asarray(_link(self.link)(mean))

    def predictor_slope(self, mean: Floats) -> Floats:
        """Return ``g'(mean)``."""
        return np.asarray(_link(self.link).deriv(mean))

    def score(self, y: Floats, eta: Floats, out: Floats | None = None) -> Floats:
        """Return the slope of the row's log-likelihood in ``eta``; ``out``, which may be ``eta``, is room for it."""
        if self.link == "logit" and out is not None:
            return np.subtract(y, _expit(eta, out), out=out)
        mu = self.mean(eta)
        if self.canonical:
            return np.asarray(y - mu)
        return np.asarray((y - mu) / (self._variance(mu) * self.predictor_slope(mu)))

    def information(self, y: Floats, eta: Floats) -> Floats:
        """Return the observed information of the row about ``eta``."""
        mu = self.mean(eta)
        if self.canonical:
            return self._variance(mu)
        variance, slope = self._variance(mu), self.predictor_slope(mu)
        bend = self._family.variance.deriv(mu) * slope + variance * _link(self.link).deriv2(mu)
        return np.asarray((1 + (y - mu) * bend / (variance * slope)) / (variance * slope**2))

    def expected_information(self, eta: Floats) -> Floats:
        """Return the expected information of the row about ``eta``; never negative."""
        mu = self.mean(eta)
        if self.canonical:
            return self._variance(mu)
        return np.asarray(1 / (self._variance(mu) * self.predictor_slope(mu) ** 2))

    def deviance(self, y: Floats, eta: Floats, weight: Floats) -> float:
        """Return the weighted deviance of some rows: what a fit makes small."""
        if self.link == "logit":
            return float(2 * weight @ np.logaddexp(0, np.where(y > 0.5, -eta, eta)))
        return float(self._family.deviance(y, self.mean(eta), freq_weights=weight))

    def admissible(self, eta: Floats) -> bool:
        """Whether every mean implied by ``eta`` is one the family allows."""
        if (self.family, self.link) in {("binomial", "log")}:
            return bool(np.all(eta < 0))
        if self.family == "binomial" and self.link == "identity":
            return bool(np.all((eta > 0) & (eta < 1)))
        if self.family == "poisson" and self.link == "identity":
            return bool(np.all(eta > 0))
        return bool(np.all(np.isfinite(eta)))

    @property
    def _family(self) -> Any:
        return _family(self.family, self.link)

    def _variance(self, mu: Floats) -> Floats:
        return np.asarray(self._family.variance(mu))


def _expit(eta: Floats, out: Floats | None = None) -> Floats:
    """Return ``1 / (1 + exp(-eta))``: numpy's exponential does several rows at a time, scipy's expit does not."""
    out = np.negative(eta, out=out, dtype=np.float64)
    with np.errstate(over="ignore"):
        np.exp(out, out=out)
    out += 1
    return np.reciprocal(out, out=out)


@cache
def _family(family: str, link: str) -> Any:
    return _FAMILIES[family](_link(link), check_link=False)


@cache
def _link(link: str) -> Any:
    return _LINKS[link]()
