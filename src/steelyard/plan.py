"""The plan as frozen dataclasses, and its one other spelling, a TOML file whose keys are their fields.

Knows which words a plan may use and which values each may take. Refuses to know how anything is
computed: every floor of the house may read a plan, so this module imports nothing but the errors.
"""

from __future__ import annotations

import tomllib
import types
from collections.abc import Mapping, Sequence
from dataclasses import MISSING, dataclass, field, fields, is_dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from steelyard.errors import PlanError

SinglePsu = Literal["refuse", "recentre", "collapse", "self-representing"]
Estimand = Literal["ATE", "ATT", "ATC", "ATO"]
PropensityLink = Literal["logit", "probit"]
Family = Literal["gaussian", "binomial", "poisson"]
Measure = Literal["difference", "ratio", "odds-ratio"]
VarianceMethod = Literal["linearization"]
PropensityStatus = Literal["estimated", "known"]
Scalar = str | int | float | bool

_WANTED = {str: "text", bool: "true or false", int: "a whole number", float: "a number", Path: "a path"}


@dataclass(frozen=True, kw_only=True)
class Data:
    """The extract: where it lies, which codes mean 'no answer', and which subpopulation is asked about."""

    files: tuple[str, ...] = ()
    domain: str = ""
    missing: Mapping[str, tuple[Scalar, ...]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        _settle(self)


@dataclass(frozen=True, kw_only=True)
class Design:
    """How the sample was drawn, as columns of the extract.

    ``clusters`` runs from the first stage down; without it every row is a PSU. ``population`` gives,
    stage by stage, the column that holds how many units of that stage the population has within
    the unit above (for the first stage: within the stratum).
    """

    weight: str
    strata: tuple[str, ...] = ()
    clusters: tuple[str, ...] = ()
    population: tuple[str, ...] = ()
    single_psu: SinglePsu = "refuse"

    def __post_init__(self) -> None:
        _settle(self)
        if len(self.clusters) > 3:
            raise PlanError(
                f"design.clusters names {len(self.clusters)} stages; at most three are supported.",
                mend="Keep the first three stages: the later ones add almost nothing to the variance.",
            )
        if len(self.population) > len(self.clusters) + 1:
            raise PlanError(
                f"design.population names {len(self.population)} columns, but the design has only "
                f"{len(self.clusters)} cluster stage(s) and the rows below them.",
                mend="Give one column a stage, from the first stage down.",
            )
        repeated = sorted({c for c in self.clusters if self.clusters.count(c) > 1})
        if repeated:
            raise PlanError(
                f"design.clusters names {', '.join(repeated)} more than once.", mend="Name each stage once."
            )


@dataclass(frozen=True, kw_only=True)
class Exposure:
    """Who is exposed, the model of the propensity, and what is made of it.

    ``weighted`` fits the propensity under the sampling weights. ``stabilize`` multiplies the balancing
    weights by the marginal share of each group. ``cap_quantile`` caps the combined weights at that
    quantile of them; ``propensity_range`` drops rows whose propensity lies outside it.
    ``exposed`` and ``reference`` name the two values compared, where the column is not 0/1.
    """

    formula: str
    estimand: Estimand = "ATE"
    link: PropensityLink = "logit"
    weighted: bool = True
    stabilize: bool = False
    cap_quantile: float | None = None
    propensity_range: tuple[float, float] | None = None
    exposed: Scalar | None = None
    reference: Scalar | None = None

    def __post_init__(self) -> None:
        _settle(self)
        if self.cap_quantile is not None and not 0.5 <= self.cap_quantile < 1:
            raise PlanError(
                f"exposure.cap_quantile is {self.cap_quantile}; it must lie from 0.5 up to, not including, 1.",
                mend="Use a high quantile such as 0.99, or leave the key out to cap nothing.",
            )
        if self.propensity_range is not None:
            if len(self.propensity_range) != 2:
                raise PlanError(
                    f"exposure.propensity_range has {len(self.propensity_range)} values; it takes two.",
                    mend="Write it as [0.05, 0.95], for example.",
                )
            low, high = self.propensity_range
            if not 0 <= low < high <= 1:
                raise PlanError(
                    f"exposure.propensity_range is [{low}, {high}]; it must satisfy 0 <= low < high <= 1.",
                    mend="Write it as [0.05, 0.95], for example.",
                )
        if self.stabilize and self.estimand == "ATO":
            raise PlanError(
                "exposure.stabilize has no meaning for the ATO: overlap weights are bounded by 1 as they are.",
                mend="Leave the key out, or choose another estimand.",
            )
        if self.reference is not None and self.exposed is None:
            raise PlanError(
                "exposure.reference is given without exposure.exposed.", mend="Name the exposed level too."
            )


@dataclass(frozen=True, kw_only=True)
class Balance:
    """What to check beyond the terms of the exposure formula."""

    columns: tuple[str, ...] = ()
    squares: bool = False
    interactions: bool = False

    def __post_init__(self) -> None:
        _settle(self)


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """One outcome: its column, its family, the measure of effect, and covariates to adjust for."""

    name: str
    family: Family = "gaussian"
    measure: Measure = "difference"
    covariates: str = ""

    def __post_init__(self) -> None:
        _settle(self)
        if self.measure == "odds-ratio" and self.family != "binomial":
            raise PlanError(
                f'outcome "{self.name}" asks for an odds ratio of a {self.family} outcome.',
                mend='Odds need family = "binomial"; for other outcomes ask for "difference" or "ratio".',
            )


@dataclass(frozen=True, kw_only=True)
class Variance:
    """How standard errors are made, and whether they count the propensity's own estimation."""

    method: VarianceMethod = "linearization"
    propensity: PropensityStatus = "estimated"
    confidence: float = 0.95

    def __post_init__(self) -> None:
        _settle(self)
        if not 0.5 <= self.confidence < 1:
            raise PlanError(
                f"variance.confidence is {self.confidence}; it must lie from 0.5 up to, not including, 1.",
                mend="Write 0.95 for a 95% interval.",
            )


@dataclass(frozen=True, kw_only=True)
class Report:
    """What may leave the house: counts under ``minimum_count`` are hidden in tables and figures."""

    minimum_count: int = 10

    def __post_init__(self) -> None:
        _settle(self)
        if self.minimum_count < 0:
            raise PlanError(
                f"report.minimum_count is {self.minimum_count}; it cannot be negative.",
                mend="Ask the disclosure officer for the local minimum; 10 is the default.",
            )


@dataclass(frozen=True, kw_only=True)
class Plan:
    """The whole plan. ``folder`` is where relative file names start; it is not a key of the TOML file."""

    title: str = ""
    data: Data = field(default_factory=Data)
    design: Design
    exposure: Exposure
    outcome: tuple[Outcome, ...]
    balance: Balance = field(default_factory=Balance)
    variance: Variance = field(default_factory=Variance)
    report: Report = field(default_factory=Report)
    folder: Path | None = field(default=None, compare=False, metadata={"key": False})

    def __post_init__(self) -> None:
        _settle(self)
        if not self.outcome:
            raise PlanError("The plan has no outcome.", mend="Add at least one [[outcome]] with a name.")
        seen: set[tuple[str, str, str]] = set()
        for outcome in self.outcome:
            key = (outcome.name, outcome.measure, outcome.covariates)
            if key in seen:
                raise PlanError(
                    f'The plan lists outcome "{outcome.name}" with measure "{outcome.measure}" twice.',
                    mend="Remove one, or give it another measure or covariates.",
                )
            seen.add(key)


def read_plan(path: str | Path) -> dict[str, Any]:
    """Read a TOML plan and return the keyword arguments of a ``Plan``, ``folder`` included.

    Raises
    ------
    PlanError
        The file cannot be read, is not TOML, or has a key no section knows.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            raw = tomllib.load(file)
    except FileNotFoundError:
        raise PlanError(f"There is no plan file {path}.", mend="Check the name and the folder.") from None
    except (OSError, UnicodeDecodeError) as error:
        raise PlanError(f"The plan file {path} cannot be read: {error}.", mend="Check the file.") from None
    except tomllib.TOMLDecodeError as error:
        raise PlanError(
            f"The plan file {path} is not valid TOML: {error}.",
            mend="Look at that line: text needs quotes, lists need brackets.",
        ) from None
    arguments = _section(raw, Plan, "")
    arguments["folder"] = path.parent
    return arguments


def plan_keys(plan: object) -> dict[str, Any]:
    """Return the plan as plain dicts, lists and scalars: the keys a TOML file would have, defaults included."""
    out: dict[str, Any] = {}
    for f in fields(plan):  # type: ignore[arg-type]
        if f.metadata.get("key", True):
            value = _plain(getattr(plan, f.name))
            if value is not None:
                out[f.name] = value
    return out


def _plain(value: Any) -> Any:
    if is_dataclass(value):
        return plan_keys(value)
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(item) for item in value]
    return value


def _section(raw: Mapping[str, Any], kind: type, where: str) -> dict[str, Any]:
    """Turn a table of the file into the keyword arguments of dataclass ``kind``, naming what does not fit."""
    keys = {f.name: f for f in fields(kind) if f.metadata.get("key", True)}
    place = f"[{where}]" if where else "The top level"
    for key in raw:
        if key not in keys:
            near = get_close_matches(key, keys, n=1, cutoff=0.5)
            hint = f'Did you mean "{near[0]}"?' if near else f"Known there: {', '.join(keys)}."
            raise PlanError(f'Unknown key "{key}" in the plan: {place} does not have it.', mend=hint)
    hints = _hints(kind)
    required = [
        name
        for name, f in keys.items()
        if f.default is MISSING and f.default_factory is MISSING and name not in raw
    ]
    if required:
        raise PlanError(f'{place} of the plan lacks "{required[0]}".', mend="Add it there.")
    return {key: _coerce(value, hints[key], f"{where}.{key}" if where else key) for key, value in raw.items()}


def _settle(section: Any) -> None:
    """Give every field of a section its declared type, so that Python and TOML plans are the same plan."""
    name = type(section).__name__.lower()
    where = "" if name == "plan" else f"{name}."
    for f in fields(section):
        value = _coerce(getattr(section, f.name), _hints(type(section))[f.name], where + f.name)
        object.__setattr__(section, f.name, value)


def _hints(kind: type) -> dict[str, Any]:
    return get_type_hints(kind)


def _coerce(value: Any, hint: Any, where: str) -> Any:
    """Return ``value`` as the field's type: one word for a list of one, a table for its dataclass."""
    origin, arguments = get_origin(hint), get_args(hint)
    if is_dataclass(hint):
        return _coerce_table(value, hint, where)  # type: ignore[arg-type]
    if origin is tuple:
        return _coerce_list(value, arguments, where)
    if origin in (Union, types.UnionType):
        return _coerce_union(value, arguments, where)
    if origin is Literal:
        return _one_of(value, hint, where)
    if origin is not None and issubclass(origin, Mapping):
        if not isinstance(value, Mapping):
            raise _wrong(value, "a table", where)
        return {str(key): _coerce(item, arguments[1], f"{where}.{key}") for key, item in value.items()}
    if hint is float and isinstance(value, int) and not isinstance(value, bool):
        return float(value)
    if isinstance(value, hint) and not (hint is int and isinstance(value, bool)):
        return value
    raise _wrong(value, _WANTED[hint], where)


def _coerce_table(value: Any, kind: type, where: str) -> Any:
    if isinstance(value, kind):
        return value
    if not isinstance(value, Mapping):
        raise _wrong(value, f"a table (in Python, a {kind.__name__} or a dict)", where)
    return kind(**_section(value, kind, where))


def _coerce_list(value: Any, arguments: tuple[Any, ...], where: str) -> tuple[Any, ...]:
    if isinstance(value, str | int | float | Mapping) or is_dataclass(value):
        value = (value,)
    if not isinstance(value, Sequence):
        raise _wrong(value, "a list", where)
    return tuple(_coerce(item, arguments[0], where) for item in value)


def _coerce_union(value: Any, arguments: tuple[Any, ...], where: str) -> Any:
    if value is None and type(None) in arguments:
        return None
    kinds = [kind for kind in arguments if kind is not type(None)]
    scalars = tuple(kind for kind in kinds if isinstance(kind, type))
    if isinstance(value, scalars):
        return value
    return _coerce(value, kinds[0], where)


def _one_of(value: Any, literal: Any, where: str) -> Any:
    words = get_args(literal)
    if value not in words:
        near = get_close_matches(str(value), words, n=1, cutoff=0.4)
        hint = f' Did you mean "{near[0]}"?' if near else ""
        raise PlanError(f'{where} is "{value}".', mend=f"It is one of {', '.join(words)}.{hint}")
    return value


def _wrong(value: Any, wanted: str, where: str) -> PlanError:
    return PlanError(f"{where} is {value!r}; it must be {wanted}.", mend=f"Write {wanted} there.")
