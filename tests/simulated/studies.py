"""Simulated studies of every design, at the least data that it accepts or names, with the truths behind them.

A case draws a study from stated true components; how often its 95 % intervals hold them is counted elsewhere.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np

from budgets.evidence.evaluation import Estimate, Evaluation, MeanSquare, Term
from budgets.evidence.study_data import NamedSource

Draw = np.random.Generator
Rows = list[tuple[Any, ...]]
Span = tuple[float, float]

# exact: by theory, or for a component by the modified large-sample method; 93 to 97 % is asked for.
# cautious: sums, components clipped at zero and whatever takes the larger of two: more than 97 % is no fault.
# approximate: as measured.
EXACT: Final = "exact"
CAUTIOUS: Final = "cautious"
APPROXIMATE: Final = "approximate"

NOISE: Final = 0.05
# Components as large as twice the noise, and as small as a fifth of it.
LARGE: Final = 0.10
SMALL: Final = 0.01


@dataclass(frozen=True)
class Case:
    """Studies of one size and situation, and the truth of every interval that is looked at."""

    design: str
    size: str
    kind: str
    columns: tuple[str, ...]
    draw: Callable[[Draw], Rows]
    truths: Mapping[str, float]
    options: Mapping[str, Any] = field(default_factory=dict)
    sources: Callable[[Draw], Sequence[NamedSource]] = lambda _: ()
    spans: Callable[[Evaluation], Mapping[str, Span | None]] | None = None

    @property
    def name(self) -> str:
        """What tells the case apart: the first two cells of its row in the table."""
        return f"{self.design}, {self.size}"


def root_of_squares(*deviations: float) -> float:
    """Give the deviation of a sum of independent errors."""
    return math.sqrt(math.fsum(deviation**2 for deviation in deviations))


def nested(counts: Sequence[int], deviations: Sequence[float]) -> Callable[[Draw], Rows]:
    """Give rows of nested labels and a figure that has an error of its own at every depth."""

    def draw(generator: Draw) -> Rows:
        figures = np.full(counts, 3.0)
        for depth, deviation in enumerate(deviations, start=1):
            shape = (*counts[:depth], *(1 for _ in counts[depth:]))
            figures = figures + generator.normal(0, deviation, shape)
        return [
            (*("-".join(map(str, place[:depth])) for depth in range(1, len(counts))), float(figures[place]))
            for place in itertools.product(*map(range, counts))
        ]

    return draw


def uneven(counts: Sequence[int], between: float) -> Callable[[Draw], Rows]:
    """Give days of so many readings."""

    def draw(generator: Draw) -> Rows:
        rows: Rows = []
        for day, number in enumerate(counts):
            shift = generator.normal(0, between)
            rows += [(f"d{day}", float(3 + shift + generator.normal(0, NOISE))) for _ in range(number)]
        return rows

    return draw


def crossed(first: int, second: int, readings: int, deviation: float) -> Callable[[Draw], Rows]:
    """Give every level of one factor with every level of the other, with an interaction."""

    def draw(generator: Draw) -> Rows:
        a, b = generator.normal(0, deviation, first), generator.normal(0, deviation, second)
        both = generator.normal(0, deviation, (first, second))
        return [
            (f"a{i}", f"b{j}", float(3 + a[i] + b[j] + both[i, j] + generator.normal(0, NOISE)))
            for i, j in itertools.product(range(first), range(second))
            for _ in range(readings)
        ]

    return draw


def differing_duplicates(samples: int, difference: float) -> Callable[[Draw], Rows]:
    """Give pairs of determinations of which the second is higher by so much."""

    def draw(generator: Draw) -> Rows:
        return [
            (f"D{sample}", float(3 + sample / 10 + difference * k + generator.normal(0, NOISE)))
            for sample in range(samples)
            for k in range(2)
        ]

    return draw


BIAS: Final = 0.05
READ, DETERMINED = 0.03, 0.04


def pairs(number: int, own: float, *, replicates: int = 1, groups: int = 0, between: float = 0.0) -> Any:
    """Give validation pairs: the analyzer's own error, its noise, that of the reference, and groups."""

    def draw(generator: Draw) -> Rows:
        shifts = generator.normal(0, between, max(groups, 1))
        rows: Rows = []
        for pair in range(number):
            truth = generator.uniform(2, 4.5)
            shown = truth + BIAS + generator.normal(0, own) + shifts[pair % max(groups, 1)]
            group = f"g{pair % groups if groups else pair}"
            for _ in range(replicates):
                reading = float(shown + generator.normal(0, READ))
                rows.append((f"V{pair}", reading, float(truth + generator.normal(0, DETERMINED)), group))
        return rows

    return draw


def known_repeatabilities(degrees_of_freedom: int) -> Callable[[Draw], Sequence[NamedSource]]:
    """Give the repeatabilities of both sides as studies of their own would find them."""

    def draw(generator: Draw) -> Sequence[NamedSource]:
        return [
            NamedSource(source, found(source, deviation**2, degrees_of_freedom, generator))
            for source, deviation in (
                ("analyzer_repeatability", READ),
                ("reference_repeatability", DETERMINED),
            )
        ]

    return draw


def found(name: str, variance: float, degrees_of_freedom: int, generator: Draw) -> Estimate:
    """Give a variance as a study of so many degrees of freedom would find it."""
    value = float(variance * generator.chisquare(degrees_of_freedom) / degrees_of_freedom)
    terms = (Term(1.0, MeanSquare(f"elsewhere/{name}", value, degrees_of_freedom)),)
    return Estimate("repeatability", terms, None, None, may_feed=("reading",), usable=True)


def autoregressive(size: int, correlation: float, noise: float = 0.0) -> Callable[[Draw], Rows]:
    """Give a series of standard deviation 1 that follows itself, read with noise."""

    def draw(generator: Draw) -> Rows:
        innovations = generator.normal(0, math.sqrt(1 - correlation**2), size)
        value = generator.normal()
        rows: Rows = []
        for innovation in innovations:
            rows.append((float(3 + value + noise * generator.normal()),))
            value = correlation * value + innovation
        return rows

    return draw


def of_a_mean(number: int, correlation: float) -> float:
    """Give the deviation of a mean of successive readings: 1/n (1 + 2 sum (1 - k/n) rho^k), its root."""
    k = np.arange(1, number)
    return math.sqrt((1 + 2 * float(((1 - k / number) * correlation**k).sum())) / number)


def of_increments(lot: int, number: int, scheme: str, correlation: float) -> float:
    """Give the sampling error of increments, from integrals over the variogram 1 - exp(-h/T) of the truth."""
    memory = -1 / math.log(correlation)

    def within(length: float) -> float:
        part = memory / length
        return 1 - 2 * part - 2 * part**2 * math.expm1(-length / memory)

    step = lot / number
    systematic = within(lot) + 2 / number**2 * math.fsum(
        (number - k) * math.expm1(-k * step / memory) for k in range(1, number)
    )
    variances = {"random": within(lot) / number, "stratified": within(step) / number}
    return math.sqrt({**variances, "systematic": systematic}[scheme])


# --- the cases -----------------------------------------------------------------------------------------


def cases() -> Iterator[Case]:
    """Give all cases, design by design."""
    yield from _repeatability()
    yield from _duplicates()
    yield from _nested_precision()
    yield from _sampling()
    yield from _agreement()
    yield from _lines()
    yield from _others()
    yield from _streams()


def _situation(deviation: float) -> str:
    return "components twice the noise" if deviation == LARGE else "components a fifth of the noise"


def _repeatability() -> Iterator[Case]:
    columns = ("sample", "reading")
    yield Case(
        "repeatability",
        "1 sample of 2 readings",
        EXACT,
        columns,
        nested((1, 2), (0, NOISE)),
        {"repeatability": NOISE},
    )

    def growing(generator: Draw) -> Rows:
        return [
            (f"P{i}", float(level + generator.normal(0, root_of_squares(NOISE, 0.03 * level))))
            for i, level in enumerate(np.linspace(1, 8, 5))
            for _ in range(3)
        ]

    def ends(evaluation: Evaluation) -> Mapping[str, Span]:
        shown = evaluation.diagnostics["level_dependence"]["standard_deviations"]
        return {
            end: (shown[i]["lower"], shown[i]["upper"])
            for end, i in (("lowest level", 0), ("highest level", -1))
        }

    yield Case(
        "repeatability",
        "5 samples of 3 readings, the scatter over the level",
        APPROXIMATE,
        columns,
        growing,
        {"lowest level": root_of_squares(NOISE, 0.03), "highest level": root_of_squares(NOISE, 0.24)},
        spans=ends,
    )
    yield Case(
        "covariance",
        "2 samples of 2 scans",
        EXACT,
        ("sample", "x", "y"),
        lambda g: [(f"P{i}", *map(float, g.normal(3, NOISE, 2))) for i in range(2) for _ in range(2)],
        {"repeatability_x": NOISE, "repeatability_y": NOISE},
    )


def _duplicates() -> Iterator[Case]:
    columns, truths = ("sample", "result"), {"repeatability": NOISE}
    for words, difference in (
        ("alike", 0.0),
        ("one standard deviation apart", NOISE),
        ("three apart", 3 * NOISE),
    ):
        size = f"2 samples of 2, the determinations {words}"
        yield Case("duplicates", size, EXACT, columns, differing_duplicates(2, difference), truths)
    yield Case("duplicates", "2 samples of 3", EXACT, columns, nested((2, 3), (1, NOISE)), truths)


def _nested_precision() -> Iterator[Case]:
    design = "nested_precision"
    for b in (LARGE, SMALL):
        words = _situation(b)
        parts = {"repeatability": NOISE, "between_days": b}
        size = f"2 days of 2 readings, {words}"
        yield Case(design, size, EXACT, ("day", "reading"), nested((2, 2), (b, NOISE)), parts)
        parts = parts | {"between_operators": b, "between_presentations": b}
        columns = ("day", "operator", "presentation", "reading")
        draw = nested((2, 2, 2, 2), (b, b, b, NOISE))
        yield Case(
            design, f"2 days, 2 operators, 2 presentations, 2 readings, {words}", EXACT, columns, draw, parts
        )
        whole = {"intermediate_precision": root_of_squares(b, b, b, NOISE)}
        yield Case(design, f"the same, their sum, {words}", CAUTIOUS, columns, draw, whole)
        parts = {"repeatability": NOISE, "between_days": b, "between_operators": b, "interaction": b}
        draw, columns = crossed(2, 2, 2, b), ("day", "operator", "reading")
        crossing = {"arrangement": "crossed"}
        yield Case(
            design, f"2 days x 2 operators x 2 readings, {words}", EXACT, columns, draw, parts, crossing
        )
        yield Case(design, f"the same crossed, their sum, {words}", CAUTIOUS, columns, draw, whole, crossing)
        parts = {"repeatability": NOISE, "between_days": b}
        size = f"4 days of 1, 2, 3 and 4 readings, {words}"
        yield Case(design, size, APPROXIMATE, ("day", "reading"), uneven((1, 2, 3, 4), b), parts)
        columns, draw = ("laboratory", "reading"), nested((2, 2), (b, NOISE))
        truths = {"reproducibility": root_of_squares(b, NOISE)}
        yield Case(design, f"2 laboratories of 2 readings, {words}", CAUTIOUS, columns, draw, truths)


def _sampling() -> Iterator[Case]:
    columns = ("target", "sample", "result")
    for targets, b in itertools.product((2, 8), (LARGE, SMALL)):
        draw = nested((targets, 2, 2), (0.3, b, NOISE))
        size = f"{targets} targets, 2 samples, 2 analyses, {_situation(b)}"
        truths = {"repeatability": NOISE, "sampling": b, "between_targets": 0.3}
        yield Case("sampling", size, EXACT, columns, draw, truths)
        whole = {"measurement": root_of_squares(b, NOISE)}
        robust = {f"robust_{name}": truth for name, truth in (truths | whole).items()}
        yield Case("sampling", f"{size}: robust", APPROXIMATE, columns, draw, robust)
        yield Case("sampling", f"{size}: the sum", CAUTIOUS, columns, draw, whole)


def _agreement() -> Iterator[Case]:
    columns, options = ("pair", "reading", "reference", "group"), {"independent": True}
    for number, b in itertools.product((2, 20), (LARGE, SMALL)):
        whole = root_of_squares(b, READ / math.sqrt(2), DETERMINED / math.sqrt(2))
        truths = {"bias": BIAS, "standard_error_of_prediction": whole, "remainder": b}
        words = "large" if b == LARGE else "small"
        size = f"{number} pairs, twice on either side, {words} remainder"
        yield Case("agreement", size, EXACT, columns, pairs(number, b, replicates=2), truths, options)
        size = f"{number} pairs, repeatabilities of 10 degrees of freedom, {words} remainder"
        yield Case(
            "agreement",
            size,
            EXACT,
            columns,
            pairs(number, b),
            {"remainder": b},
            options,
            known_repeatabilities(10),
        )
    for groups, between in itertools.product((2, 3, 4), (0.0, LARGE)):
        words = "that differ" if between else "alike"
        draw = pairs(20, SMALL, groups=groups, between=between)
        kind = EXACT if between else CAUTIOUS
        yield Case(
            "agreement", f"20 pairs in {groups} groups {words}", kind, columns, draw, {"bias": BIAS}, options
        )
    yield _below_limits()


def _below_limits() -> Case:
    def draw(generator: Draw) -> Rows:
        """Twenty pairs, of which half of the references lie below their limit."""
        levels = [*generator.uniform(0.1, 0.45, 10), *generator.uniform(0.9, 3, 10)]
        rows: Rows = []
        for pair, level in enumerate(levels):
            reference = level + generator.normal(0, DETERMINED)
            reading = float(reference + BIAS + generator.normal(0, LARGE))
            rows.append((f"V{pair}", reading, float(reference) if level > 0.6 else {"below": 0.65}))
        return rows

    return Case(
        "agreement",
        "20 pairs, 10 of them below a reporting limit",
        APPROXIMATE,
        ("pair", "reading", "reference"),
        draw,
        {"bias": BIAS, "standard_error_of_prediction": LARGE},
        {"independent": True},
    )


def _lines() -> Iterator[Case]:
    """Slopes, and the agreement near a limit: what stands in the diagnostics with an interval."""
    columns, independent = ("pair", "reading", "reference"), {"independent": True}

    def on_a_line(number: int, of_reading: float, of_reference: float) -> Callable[[Draw], Rows]:
        def draw(generator: Draw) -> Rows:
            truths = np.linspace(2, 4.5, number)
            return [
                (
                    f"V{i}",
                    float(x + generator.normal(0, of_reading)),
                    float(x + generator.normal(0, of_reference)),
                )
                for i, x in enumerate(truths)
            ]

        return draw

    def slope_of(member: str) -> Callable[[Evaluation], Mapping[str, Span | None]]:
        def spans(evaluation: Evaluation) -> Mapping[str, Span | None]:
            line = evaluation.diagnostics[member]
            known = line is not None and line["slope_lower"] is not None
            return {"slope": (line["slope_lower"], line["slope_upper"]) if known else None}

        return spans

    for number in (3, 20):
        draw = on_a_line(number, 0.0, LARGE)
        size = f"{number} pairs, slope of reference on reading"
        yield Case(
            "agreement", size, EXACT, columns, draw, {"slope": 1.0}, independent, spans=slope_of("slope_test")
        )
    ratio = {"independent": True, "error_variance_ratio": 1.0}
    for number in (3, 10):
        size = f"{number} pairs, slope with errors on both sides"
        draw = on_a_line(number, LARGE, LARGE)
        spans = slope_of("line_with_known_ratio")
        yield Case("agreement", size, APPROXIMATE, columns, draw, {"slope": 1.0}, ratio, spans=spans)

    def near(evaluation: Evaluation) -> Mapping[str, Span | None]:
        (figures,) = evaluation.diagnostics["near_limits"]
        local = figures["from"] == "pairs near the limit"
        return {"local SEP": (figures["lower"], figures["upper"]) if local else None}

    def crowded(generator: Draw) -> Rows:
        """Ten pairs at the limit, twenty far from it."""
        levels = [*np.full(10, 3.0), *generator.uniform(4, 6, 20)]
        return [(f"V{i}", float(y + generator.normal(0, LARGE)), float(y)) for i, y in enumerate(levels)]

    at_limit = {"independent": True, "tolerance_limits": [3.0]}
    yield Case(
        "agreement",
        "10 pairs near a limit",
        EXACT,
        columns,
        crowded,
        {"local SEP": LARGE},
        at_limit,
        spans=near,
    )


def _others() -> Iterator[Case]:
    free = {"steered_by_this_analyzer": False}
    for b in (LARGE, SMALL):
        words = _situation(b)
        fleet = {"between_instruments": b, "sample_by_instrument": b, "repeatability": NOISE}
        columns: tuple[str, ...] = ("sample", "instrument", "reading")
        for samples, instruments in ((2, 2), (5, 5)):
            size = f"{samples} samples x {instruments} instruments x 2 readings, {words}"
            yield Case("fleet", size, EXACT, columns, crossed(samples, instruments, 2, b), fleet)
        columns = ("session", "result", "assigned_value")

        def checks(readings: int, between: float = b) -> Callable[[Draw], Rows]:
            draw = nested((5, readings), (between, NOISE))
            return lambda generator: [(*row, 3.0) for row in draw(generator)]

        truths = {"between_sessions": b, "repeatability": NOISE, "bias": 0.0}
        yield Case("check_samples", f"5 sessions of 2 results, {words}", EXACT, columns, checks(2), truths)
        whole = {"intermediate_precision": root_of_squares(b, NOISE)}
        yield Case("check_samples", f"the same, their sum, {words}", CAUTIOUS, columns, checks(2), whole)
        truths = {**whole, "bias": 0.0}
        yield Case("check_samples", f"5 sessions of 1 result, {words}", EXACT, columns, checks(1), truths)
        truths = {"lot_to_lot": b, "within_lot": NOISE}
        draw = nested((5, 2), (b, NOISE))
        yield Case(
            "production", f"5 lots of 2 readings, {words}", EXACT, ("lot", "reading"), draw, truths, free
        )
        truths = {"period_to_period": b, "lot_to_lot": b, "within_lot": b, "repeatability": NOISE}
        columns, draw = ("period", "lot", "sample", "reading"), nested((2, 3, 2, 2), (b, b, b, NOISE))
        size = f"2 periods, 3 lots, 2 samples, 2 readings, {words}"
        yield Case("production", size, EXACT, columns, draw, truths, free)


def _streams() -> Iterator[Case]:
    columns, design = ("reading",), "process_stream"
    for correlation, number in itertools.product((0.0, 0.5, 0.8), (1, 10)):
        name = "repeatability" if number == 1 else "averaged_repeatability"
        options: dict[str, Any] = {"held_sample": True, "readings_averaged": number}
        size = f"100 readings of a held sample, correlation {correlation:g}, {number} averaged"
        truths = {name: of_a_mean(number, correlation)}
        draw = autoregressive(100, correlation)
        yield Case(design, size, APPROXIMATE, columns, draw, truths, options)
    for scheme, correlation in itertools.product(("random", "stratified", "systematic"), (0.8, 0.95)):
        options = {"held_sample": False, "lot_length": 15, "increments": 3, "scheme": scheme}
        size = f"30 readings of a process, correlation {correlation:g}, 3 {scheme} increments of 15"
        truths = {"sampling": of_increments(15, 3, scheme, correlation)}
        yield Case(design, size, APPROXIMATE, columns, autoregressive(30, correlation), truths, options)
    options = {"held_sample": False, "lot_length": 15, "increments": 3, "scheme": "systematic"}

    def analyzer(generator: Draw) -> Sequence[NamedSource]:
        return [NamedSource("analyzer_repeatability", found("scans", 0.3**2, 20, generator))]

    yield Case(
        design,
        "the same 0.95, systematic, the analyzer taken out",
        APPROXIMATE,
        columns,
        autoregressive(30, 0.95, noise=0.3),
        {"sampling": of_increments(15, 3, "systematic", 0.95)},
        options,
        analyzer,
    )
