"""Effects of exposures nobody randomised, from household surveys.

``Study`` is the plan and carries it out; the other names are the plan's sections.
"""

from steelyard.plan import Balance, Data, Design, Exposure, Outcome, Report, SuppliedReplicates, Variance
from steelyard.study import Study

__all__ = [
    "Balance",
    "Data",
    "Design",
    "Exposure",
    "Outcome",
    "Report",
    "Study",
    "SuppliedReplicates",
    "Variance",
]
