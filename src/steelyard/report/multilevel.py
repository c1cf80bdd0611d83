"""Multilevel outcome models as tables: parameters, the effect without the model, scalings side by side."""

from __future__ import annotations

from steelyard.report.disclosure import Released
from steelyard.report.numbers import count, p_value, percent, significant
from steelyard.report.tables import Table, cell, term_label, with_decimals
from steelyard.report.words import listed
from steelyard.results.multilevel import MultilevelResults

SCALINGS = {
    "size": "cluster size",
    "effective": "effective cluster size",
    "none": "nothing: weights as they are",
}
HEADINGS = {"size": "Size", "effective": "Effective size", "none": "Nothing"}


def between_table(released: Released) -> Table:
    """The differences between clusters and within them, before and after; no rows where the plan names no clusters."""
    two = with_decimals(2)
    named = [f"{part}_{when}" for when in ("before", "after") for part in ("smd", "between", "within")]
    rows = tuple(
        (term_label(record), *(cell(record[name], two) for name in named))
        for record in released.clusters.to_dict("records")
    )
    clusters = released.plan.balance.clusters
    return Table(
        "between-clusters",
        f"Differences between and within clusters ({clusters})",
        ("Term", *("All", "Between", "Within") * 2),
        rows,
        groups=(("", 1), ("Before: sampling weights", 3), ("After: combined weights", 3)),
        note="Standardized mean differences; the part between clusters is that of the cluster means, and the two parts "
        "add up to the whole. Covariates that say something of clusters can take away what is left between them.",
    )


def among_clusters_table(released: Released) -> Table:
    """Whole clusters compared, where they are what is exposed."""
    named = [
        f"{part}_{when}" for when in ("before", "after") for part in ("mean_exposed", "mean_reference", "smd")
    ]
    writers = (significant, significant, with_decimals(2)) * 2
    rows = tuple(
        (term_label(record), *(writer(record[name]) for name, writer in zip(named, writers, strict=True)))
        for record in released.among_clusters.to_dict("records")
    )
    return Table(
        "among-clusters",
        f"The clusters compared ({released.plan.exposure.clusters})",
        ("Term", *("Exposed", "Reference", "SMD") * 2),
        rows,
        groups=(("", 1), ("Before: clusters' weights", 3), ("After: balanced", 3)),
        note="Each cluster counts for its own weight, shared by its rows; the table above counts persons.",
    )


def cluster_overlap_table(released: Released) -> Table:
    """In how many clusters the groups meet."""
    rows = tuple(
        (
            str(record["clusters_with"]),
            *(cell(record[name], count) for name in ("clusters", "exposed_rows", "reference_rows")),
            *(cell(record[name], percent) for name in ("exposed_share", "reference_share")),
        )
        for record in released.cluster_overlap.to_dict("records")
    )
    return Table(
        "cluster-overlap",
        f"Where the groups meet: clusters ({released.plan.balance.clusters})",
        ("Clusters with", "Clusters", "Exposed", "Reference", "of exposed", "of reference"),
        rows,
        groups=(("", 2), ("Rows", 2), ("Share of weight, after", 2)),
        note="In a cluster with one group alone the comparison is with other clusters.",
    )


def multilevel_tables(released: Released) -> list[Table]:
    """Return the tables of every multilevel model."""
    tables = []
    for number, results in enumerate(released.multilevel, start=1):
        tables.append(_parameters(number, results))
        tables.append(_effects(number, results))
    return tables


def _parameters(number: int, results: MultilevelResults) -> Table:
    frame = results.parameters.table
    rows = tuple(
        (
            str(record["name"]),
            cell(record["estimate"], significant),
            cell(record["std_error"], significant),
            cell(record["ci_low"], significant),
            cell(record["ci_high"], significant),
            cell(record["p_value"], p_value) if place < results.coefficients else "",
        )
        for place, record in enumerate(frame.to_dict("records"))
    )
    counted = listed([f"{count(n)} clusters of {name}" for name, n in results.clusters.items()])
    return Table(
        f"multilevel-{number}",
        f"Multilevel model of {results.outcome}",
        ("Parameter", "Estimate", "SE", "from", "to", "p"),
        rows,
        groups=(("", 3), ("Interval", 2), ("", 1)),
        note=f"Pseudo-maximum likelihood on {counted}; rows' weights scaled to "
        f"{SCALINGS[_scalings(results)[0]]}; the balancing weight multiplies the weights of "
        f"{results.balanced}. No test is shown of a variance: it cannot be negative.",
    )


def _effects(number: int, results: MultilevelResults) -> Table:
    decimals = with_decimals(4)
    scalings = _scalings(results)
    by_scaling = [results.scalings[results.scalings["scaling"] == scaling] for scaling in scalings]
    effects = [frame.iloc[0] for frame in by_scaling]
    rows = [
        ("effect", decimals(results.plain[0]), *(decimals(effect["estimate"]) for effect in effects)),
        ("its SE", decimals(results.plain[1]), *(decimals(effect["std_error"]) for effect in effects)),
    ]
    rows += [
        (str(name), "", *(significant(frame["estimate"].iloc[k]) for frame in by_scaling))
        for k, name in enumerate(by_scaling[0]["parameter"])
        if k
    ]
    return Table(
        f"multilevel-effects-{number}",
        f"With and without the multilevel model: {results.outcome}",
        ("", "Without", *(HEADINGS[scaling] for scaling in scalings)),
        tuple(rows),
        groups=(("", 2), ("Rows' weights scaled to", len(scalings))),
        note="The model compares rows of the same cluster more than it compares clusters; where clusters differ in "
        "ways that the covariates do not hold, the two effects part. Scalings that give different answers say that "
        "clusters are small or weights within them unequal.",
    )


def multilevel_sentence(results: MultilevelResults) -> str:
    """Return what the methods say of one model, without its references and full stop."""
    scalings = [SCALINGS[scaling].split(":")[0] for scaling in _scalings(results)]
    return (
        f"For {results.outcome} the effect is the exposure's coefficient in a linear mixed model with random effects "
        f"of {listed(list(results.clusters))}, fitted by pseudo-maximum likelihood with a weight at each level; the "
        f"balancing weight multiplied the weights of {results.balanced}, and rows' weights were scaled to "
        f"{listed(scalings)}"
    )


def _scalings(results: MultilevelResults) -> list[str]:
    """Return the scalings that were asked for, the answer's first."""
    return [str(scaling) for scaling in results.scalings["scaling"].unique()]
