"""Declarations: a stated figure, and what it means, turned into a standard uncertainty (Type B).

A bare figure ("the laboratory's error is 0.2") is refused until it says what it is.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, fields, replace

from budgets.distributions import relative_half_width
from budgets.errors import BudgetsError, ComponentError, raise_collected
from budgets.evidence.evaluation import Estimate, Evaluation, MeanSquare, Term
from budgets.levels import levels_from
from budgets.propagation import coverage_factor

# ISO 5725-6:1994, 4.1.4 (from memory): r = f s_r with f = 2.8, the rounded 1.96 sqrt(2).
CRITICAL_RANGE_FACTOR = 2.8
EXACT_CRITICAL_RANGE_FACTOR = 1.96 * math.sqrt(2)

_SHA256 = re.compile(r"[0-9a-f]{64}", re.IGNORECASE)

DISTRIBUTIONS = ("rectangular", "triangular", "trapezoidal", "arcsine", "normal")

_OPTIONS: dict[str, tuple[str, ...]] = {
    "standard_deviation": ("results", "reliability"),
    "mean_of_determinations": ("determinations", "results", "reliability"),
    "expanded": ("coverage_factor", "reliability"),
    "expanded_with_probability": ("coverage_probability", "degrees_of_freedom", "reliability"),
    "repeatability_limit": ("factor", "reliability"),
    "reproducibility_limit": ("repeatability_limit", "factor", "reliability"),
    "half_width": ("distribution", "top_to_base_ratio", "coverage_probability", "reliability"),
    "resolution": ("reliability",),
}
_REQUIRED: dict[str, tuple[str, ...]] = {
    "mean_of_determinations": ("determinations",),
    "expanded": ("coverage_factor",),
    "expanded_with_probability": ("coverage_probability",),
    "half_width": ("distribution",),
}
MEANINGS: tuple[str, ...] = tuple(_OPTIONS)
_RELATIVE = "relative"
# Of a relative figure: what the fraction is, one of the meanings above; nothing can be relative to a display.
RELATIVE_MEANINGS: tuple[str, ...] = tuple(name for name in _OPTIONS if name != "resolution")
FRACTIONS = {None: 1.0, "1": 1.0, "%": 0.01, "ppm": 1e-6}
_ALWAYS = ("meaning", "value", "unit", "document", "title", "edition", "sha256")


@dataclass(frozen=True)
class Declaration:
    """A stated figure and what it means.

    Parameters
    ----------
    meaning : str or None
        One of ``MEANINGS``, or ``relative``.
    value : float
        The figure, in ``unit``.
    unit : str or None
        None: the unit of the characteristic.
    results : int or None
        Number of results that a standard deviation was computed from.
    determinations : int or None
        Number of determinations averaged, for ``mean_of_determinations``.
    coverage_factor, coverage_probability, degrees_of_freedom : float or None
        Of an expanded uncertainty; the probability also of a normal half-width.
    repeatability_limit : float or None
        The limit r stated together with a reproducibility limit R.
    factor : float, "exact" or None
        Between limit and standard deviation: 2.8 by default, ``exact`` for 1.96 sqrt(2).
    distribution : str or None
        Of a half-width.
    top_to_base_ratio : float or None
        Of a trapezoidal distribution, 0 (triangular) to 1 (rectangular).
    reliability : float or None
        Relative uncertainty of the figure itself, e.g. 0.25.
    document, title, edition : str
        Where the figure stands.
    sha256 : str or None
        Of the document: 64 hexadecimal digits.
    figure : str or None
        Of a ``relative`` declaration: what the fraction is, one of ``RELATIVE_MEANINGS``. The value is then a
        fraction of the measured value, its ``unit`` one of ``FRACTIONS`` (none: a plain fraction).
    absolute : float or None
        Of a ``relative`` declaration: the figure of the same meaning that holds besides, in the unit of the
        characteristic: ``u^2 = s0^2 + (s1 x)^2``.
    """

    meaning: str | None
    value: float
    unit: str | None = None
    results: int | None = None
    determinations: int | None = None
    coverage_factor: float | None = None
    coverage_probability: float | None = None
    degrees_of_freedom: float | None = None
    repeatability_limit: float | None = None
    factor: float | str | None = None
    distribution: str | None = None
    top_to_base_ratio: float | None = None
    reliability: float | None = None
    document: str = ""
    title: str = ""
    edition: str = ""
    sha256: str | None = None
    figure: str | None = None
    absolute: float | None = None


def evaluate(declaration: Declaration, *, code: str, unit: str | None = None) -> Evaluation:
    """Return the standard uncertainty that a declaration stands for.

    Parameters
    ----------
    declaration : Declaration
    code : str
        Prefix of the codes of its mean squares.
    unit : str or None
        Unit wanted, where the declaration states one; None leaves the figure as it is.

    Returns
    -------
    Evaluation
        Of the design ``declaration``; estimates ``standard_uncertainty``, or for limits ``repeatability``,
        ``between_laboratories``, ``reproducibility``.

    Raises
    ------
    ComponentError
        If the meaning is missing or unknown, an option does not belong to it, is missing or out of range.
    UnitsError
        If the stated unit does not convert.

    Notes
    -----
    Source: JCGM 100:2008, 4.3.3 to 4.3.9 and G.4.2, eq. (G.3); ISO 5725-6:1994, 4.1.4 (from memory). A figure
    relative to the value gives an estimate with ``relative_terms``: its uncertainty is evaluated where it is
    used, ``u^2 = s0^2 + (s1 x)^2`` (common practice, no source).

    Examples
    --------
    >>> stated = Declaration("expanded", 240.0, coverage_factor=3.0)
    >>> evaluate(stated, code="mass").estimate().standard_uncertainty
    80.0
    """
    meaning = _known_meaning(declaration)
    if meaning == _RELATIVE:
        return _relative(declaration, code)
    raise_collected(_faults_of_presence(declaration, meaning) or _faults_of_values(declaration))
    scale = 1.0
    if unit is not None and declaration.unit is not None:
        from budgets.units import conversion  # pint is slow to load and seldom needed

        scale = abs(conversion(declaration.unit, unit).of_difference(1.0))
    if meaning == "reproducibility_limit":
        estimates = _reproducibility(declaration, code, scale)
    elif meaning == "mean_of_determinations":
        estimates = _mean_of_determinations(declaration, code, scale)
    else:
        name = "repeatability" if meaning == "repeatability_limit" else "standard_uncertainty"
        figure = scale * _STANDARD_UNCERTAINTY[meaning](declaration)
        term = Term(1.0, MeanSquare(f"{code}/{name}", figure**2, _degrees_of_freedom(declaration)))
        contains = {"repeatability_limit": ("repeatability", "resolution"), "resolution": ("resolution",)}
        first = "reference" if meaning not in contains else "reading"
        single = _estimate(name, (term,), first, contains.get(meaning, ()))
        shape = _shape(declaration)
        estimates = (replace(single, distribution=shape, top_to_base_ratio=declaration.top_to_base_ratio),)
    return _evaluation(declaration, estimates)


def _evaluation(declaration: Declaration, estimates: tuple[Estimate, ...]) -> Evaluation:
    return Evaluation(
        design="declaration",
        estimates=estimates,
        used=1,
        diagnostics={
            item.name: getattr(declaration, item.name)
            for item in fields(declaration)
            if getattr(declaration, item.name) not in (None, "")
        },
    )


def _relative(declaration: Declaration, code: str) -> Evaluation:
    """Evaluate a fraction of the value as the figure that it is a fraction of.

    Raises
    ------
    ComponentError
        As `evaluate`, and if it does not say what figure the fraction is.
    """
    figure = declaration.figure
    faults: list[BudgetsError] = []
    if figure not in RELATIVE_MEANINGS:
        faults.append(
            ComponentError(
                f"what is {declaration.value:g} of the value? Say one of: {', '.join(RELATIVE_MEANINGS)}",
                where=("figure",),
            )
        )
    if declaration.unit not in FRACTIONS:
        faults.append(
            ComponentError(
                f"a relative figure is a fraction, in % or in ppm, not in {declaration.unit!r}",
                where=("unit",),
            )
        )
    raise_collected(faults)
    plain = replace(declaration, meaning=figure, figure=None, absolute=None, unit=None)
    fraction = FRACTIONS[declaration.unit]
    limit = declaration.repeatability_limit
    scaled = replace(
        plain,
        value=declaration.value * fraction,
        repeatability_limit=None if limit is None else limit * fraction,
    )
    relative = evaluate(scaled, code=f"{code}/relative").estimates
    if declaration.absolute is None:
        return _evaluation(
            declaration, tuple(replace(item, terms=(), relative_terms=item.terms) for item in relative)
        )
    if limit is not None:
        raise ComponentError(
            "a reproducibility limit with an absolute part: give the repeatability limit as a declaration of "
            "its own",
            where=("absolute",),
        )
    try:
        absolute = evaluate(replace(plain, value=declaration.absolute), code=code).estimates
    except ComponentError as error:
        # The other members were seen to be right, so it is this figure.
        raise ComponentError(f"absolute: {error.message}", where=("absolute",)) from error
    both = zip(absolute, relative, strict=True)
    return _evaluation(declaration, tuple(replace(a, relative_terms=r.terms) for a, r in both))


def _known_meaning(declaration: Declaration) -> str:
    meaning = declaration.meaning
    if meaning is None:
        raise ComponentError(
            f"what does the figure {declaration.value:g} mean? Say one of: "
            f"{', '.join((*MEANINGS, _RELATIVE))}",
            where=("meaning",),
        )
    if meaning not in (*MEANINGS, _RELATIVE):
        raise ComponentError(
            f"{meaning!r} is no meaning of a figure; say one of: {', '.join((*MEANINGS, _RELATIVE))}",
            where=("meaning",),
        )
    return meaning


def _faults_of_presence(declaration: Declaration, meaning: str) -> list[BudgetsError]:
    given = {
        item.name
        for item in fields(declaration)
        if item.name not in _ALWAYS and getattr(declaration, item.name) is not None
    }
    own = _OPTIONS[meaning]
    required = list(_REQUIRED.get(meaning, ()))
    if meaning == "half_width":
        needed = {"trapezoidal": "top_to_base_ratio", "normal": "coverage_probability"}
        option = needed.get(declaration.distribution or "")
        own = ("distribution", "reliability", *([option] if option else []))
        required += [option] if option else []
    faults: list[BudgetsError] = [
        ComponentError(f"{name} does not belong to {meaning}, which takes {', '.join(own)}", where=(name,))
        for name in sorted(given - set(own))
    ]
    faults += [
        ComponentError(f"{meaning} needs {name}", where=(name,)) for name in required if name not in given
    ]
    both = [name for name in ("results", "degrees_of_freedom") if name in given and "reliability" in given]
    faults += [
        ComponentError(
            f"{name} and reliability both say how well the figure is known; give one of them",
            where=("reliability",),
        )
        for name in both
    ]
    return faults


def _faults_of_values(declaration: Declaration) -> list[BudgetsError]:
    faults: list[BudgetsError] = []

    def check(name: str, ok: Callable[[float], bool], expected: str) -> None:
        value = getattr(declaration, name)
        if value is not None and not (math.isfinite(value) and ok(value)):
            faults.append(ComponentError(f"{name} must be {expected}, not {value}", where=(name,)))

    check("value", lambda v: v > 0, "a finite number above 0")
    check("results", lambda v: v >= 2, "at least 2")
    check("determinations", lambda v: v >= 1, "at least 1")
    check("coverage_factor", lambda v: v > 0, "above 0")
    check("coverage_probability", lambda v: 0 < v < 1, "between 0 and 1")
    check("degrees_of_freedom", lambda v: v > 0, "above 0")
    check("repeatability_limit", lambda v: v > 0, "above 0")
    check("top_to_base_ratio", lambda v: 0 <= v <= 1, "from 0 to 1")
    check("reliability", lambda v: 0 < v < 1, "between 0 and 1")
    if declaration.sha256 is not None and not _SHA256.fullmatch(declaration.sha256):
        faults.append(ComponentError("sha256 must be 64 hexadecimal digits", where=("sha256",)))
    if isinstance(declaration.factor, str):
        if declaration.factor != "exact":
            faults.append(ComponentError("factor must be a number or 'exact'", where=("factor",)))
    else:
        check("factor", lambda v: v > 0, "above 0, or 'exact'")
    if declaration.distribution is not None and declaration.distribution not in DISTRIBUTIONS:
        faults.append(
            ComponentError(
                f"distribution must be one of {', '.join(DISTRIBUTIONS)}, not {declaration.distribution!r}",
                where=("distribution",),
            )
        )
    return faults


def _degrees_of_freedom(declaration: Declaration) -> float:
    if declaration.results is not None:
        return declaration.results - 1
    if declaration.degrees_of_freedom is not None:
        return declaration.degrees_of_freedom
    if declaration.reliability is not None:
        # JCGM 100 eq. (G.3): nu = 1/2 (Delta u / u)^-2
        return 0.5 / declaration.reliability**2
    return math.inf


def _limit_factor(declaration: Declaration) -> float:
    if declaration.factor is None:
        return CRITICAL_RANGE_FACTOR
    return EXACT_CRITICAL_RANGE_FACTOR if declaration.factor == "exact" else float(declaration.factor)


def _expanded(declaration: Declaration) -> float:
    assert declaration.coverage_factor is not None  # required, checked before
    return declaration.value / declaration.coverage_factor  # JCGM 100, 4.3.3


def _expanded_with_probability(declaration: Declaration) -> float:
    assert declaration.coverage_probability is not None  # required, checked before
    freedom = declaration.degrees_of_freedom or math.inf
    return declaration.value / coverage_factor(declaration.coverage_probability, freedom)  # JCGM 100, 4.3.4


def _half_width(declaration: Declaration) -> float:
    shape = declaration.distribution
    if shape is None or shape == "normal":
        return _expanded_with_probability(declaration)
    # JCGM 100, 4.3.7, eq. (7), and 4.3.9, eq. (9a) and (9b); JCGM 101, 6.4.6
    return declaration.value / relative_half_width(shape, declaration.top_to_base_ratio)


def _shape(declaration: Declaration) -> str:
    if declaration.meaning == "resolution":
        return "rectangular"
    return declaration.distribution or "normal"


_STANDARD_UNCERTAINTY: dict[str, Callable[[Declaration], float]] = {
    "standard_deviation": lambda declaration: declaration.value,
    "expanded": _expanded,
    "expanded_with_probability": _expanded_with_probability,
    "repeatability_limit": lambda declaration: declaration.value / _limit_factor(declaration),
    "half_width": _half_width,
    "resolution": lambda declaration: declaration.value / math.sqrt(12),  # JCGM 100, F.2.2.1
}


def _estimate(name: str, terms: tuple[Term, ...], level: str, contains: tuple[str, ...] = ()) -> Estimate:
    return Estimate(
        name=name,
        terms=terms,
        value=None,
        interval=None,
        may_feed=levels_from(level),
        usable=True,
        contains=contains,
    )


def _mean_of_determinations(declaration: Declaration, code: str, scale: float) -> tuple[Estimate, ...]:
    square = MeanSquare(
        f"{code}/mean_of_determinations",
        (scale * declaration.value) ** 2,
        _degrees_of_freedom(declaration),
    )
    number = float(declaration.determinations or 1)
    return (
        _estimate("standard_uncertainty", (Term(1.0, square),), "reference"),
        # A single determination scatters sqrt(m) times as much as the mean of m.
        _estimate("single_determination", (Term(number, square),), "reading"),
    )


def _reproducibility(declaration: Declaration, code: str, scale: float) -> tuple[Estimate, ...]:
    factor = _limit_factor(declaration)
    freedom = _degrees_of_freedom(declaration)
    whole = MeanSquare(f"{code}/reproducibility", (scale * declaration.value / factor) ** 2, freedom)
    if declaration.repeatability_limit is None:
        return (
            _estimate(
                "reproducibility",
                (Term(1.0, whole),),
                "reference",
                ("repeatability", "between_laboratories", "resolution"),
            ),
        )
    if declaration.value < declaration.repeatability_limit:
        raise ComponentError(
            "the reproducibility limit is smaller than the repeatability limit, which it contains",
            where=("repeatability_limit",),
        )
    within = MeanSquare(
        f"{code}/repeatability", (scale * declaration.repeatability_limit / factor) ** 2, freedom
    )
    # ISO 5725-2: s_R^2 = s_L^2 + s_r^2
    between = (Term(1.0, whole), Term(-1.0, within))
    return (
        _estimate("repeatability", (Term(1.0, within),), "reading", ("repeatability", "resolution")),
        Estimate(
            name="between_laboratories",
            terms=between,
            value=None,
            interval=None,
            may_feed=levels_from("reference"),
            usable=declaration.value > declaration.repeatability_limit,
            contains=("between_laboratories",),
        ),
    )
