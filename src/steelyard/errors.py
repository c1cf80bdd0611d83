"""What can go wrong, as one small tree: every message names what, where and how many, and the mend."""

from __future__ import annotations


class SteelyardError(Exception):
    """Anything steelyard refuses to do; ``mend`` says what the user can change."""

    def __init__(self, message: str, *, mend: str = "") -> None:
        self.message = message
        self.mend = mend
        super().__init__(f"{message} {mend}".strip())

    def __reduce__(self) -> tuple[object, ...]:
        return _rebuild, (type(self), self.message, self.mend)


class PlanError(SteelyardError):
    """The plan asks for something unknown, contradictory or impossible."""


class FormulaError(PlanError):
    """A formula or domain expression uses something a plan may not use, or does not parse."""


class ExtractError(SteelyardError):
    """The extract cannot be read as the plan describes it."""


class DesignError(SteelyardError):
    """The design columns contradict each other or leave the variance undefined."""


class EstimationError(SteelyardError):
    """The data cannot support the estimate."""


class SeparationError(EstimationError):
    """A covariate tells the exposed from the reference without error, so no finite propensity model fits."""


class OverlapError(EstimationError):
    """Exposed and reference share no range of the propensity."""


class OutputError(SteelyardError):
    """The results cannot be written where the user asked."""


class MissingExtraError(SteelyardError):
    """A part of steelyard needs an optional package that is not installed."""


class SteelyardWarning(UserWarning):
    """Something a reader of the results should know; it goes into the report as well."""


def _rebuild(kind: type[SteelyardError], message: str, mend: str) -> SteelyardError:
    return kind(message, mend=mend)
