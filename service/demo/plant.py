"""The documents of the demo plant: master data, studies, budgets and specifications, as the API takes them.

The legal limits are those of the Codex standard for milk powders, CXS 207, for whole-milk powder: water at
most 5 % m/m, milk fat at least 26 % and less than 42 % m/m, milk protein at least 34 % m/m in milk
solids-not-fat (from memory). The customer's limits and all else are invented. Dates are counted back from
today, so that the evidence of the demo serves whenever it is run.
"""

from __future__ import annotations

import csv
import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from importlib.resources import files
from importlib.resources.abc import Traversable
from typing import Any, Final

Document = dict[str, Any]

PRODUCT: Final = "whole-milk-powder"
LINE: Final = "tower-1"
ANALYZER: Final = "nir-1"
CALIBRATION: Final = "wmp-7"
LABORATORY: Final = "site-lab"


@dataclass(frozen=True)
class Channel:
    """What is invented about a characteristic that the analyzer reads directly."""

    code: str
    method: str
    trueness: float  # standard uncertainty of the laboratory's trueness, %
    sampling: float  # standard deviation between samples of a lot, %
    validated_range: tuple[float, float]
    latent_variables: int
    standard_error_of_calibration: float


DERIVED: Final = "protein-in-snf"
COMPUTED: Final = "computed from nitrogen, oven and gravimetric method"

CHANNELS: Final = (
    Channel("moisture", "oven method", 0.05, 0.03, (2.3, 4.5), 6, 0.08),
    Channel("fat", "gravimetric method", 0.08, 0.05, (25.3, 28.6), 7, 0.18),
    Channel("protein", "nitrogen method", 0.06, 0.04, (23.8, 26.3), 8, 0.15),
)


def budget_code(characteristic: str) -> str:
    """Name the budget of a characteristic on the analyzer."""
    return f"wmp-{characteristic}-nir"


BUDGET: Final = budget_code("moisture")

# How a lot is sampled from the stream: a lot takes two hours, an increment is taken every half hour.
INCREMENTS: Final[Document] = {
    "held_sample": False,
    "lot_length": 120,
    "increments": 4,
    "scheme": "systematic",
}


def data_folder() -> Traversable:
    """Give the folder of the raw data files."""
    return files("service.demo").joinpath("data")


def rows_of(name: str) -> list[dict[str, str]]:
    """Read a raw data file of the demo."""
    return list(csv.DictReader(data_folder().joinpath(name).read_text("utf-8").splitlines()))


def master_data() -> Iterator[tuple[str, Document]]:
    """Give path and document of everything that the plant has, in the order in which it can be put."""
    yield (
        f"/v1/products/{PRODUCT}",
        {
            "code": PRODUCT,
            "name": "Whole-milk powder",
            "external_codes": {"mes": "4711"},
            "default_specifications": ["legal", "customer-b"],
        },
    )
    for channel in CHANNELS:
        yield (
            f"/v1/products/{PRODUCT}/characteristics/{channel.code}",
            {
                "code": channel.code,
                "product": PRODUCT,
                "unit": "%",
                "accepted_units": ["%", "g/kg", "g/100 g"],
                "basis": "as is",
                "natural_domain": {"lower": 0, "upper": 100},
                "decimals": 2,
                "derived_from": None,
            },
        )
    codes = [channel.code for channel in CHANNELS]
    yield (
        f"/v1/products/{PRODUCT}/characteristics/{DERIVED}",
        {
            "code": DERIVED,
            "product": PRODUCT,
            "unit": "%",
            "accepted_units": ["%"],
            "basis": "in solids-not-fat",
            "natural_domain": {"lower": 0, "upper": 100},
            "decimals": 1,
            "derived_from": ["protein", "moisture", "fat"],
        },
    )
    yield (
        f"/v1/analyzers/{ANALYZER}",
        {"code": ANALYZER, "kind": "analyzer", "channels": codes, "decimals": dict.fromkeys(codes, 2)},
    )
    yield f"/v1/lines/{LINE}", {"code": LINE, "name": "Tower 1", "analyzers": [ANALYZER]}
    yield (
        f"/v1/analyzers/{ANALYZER}/calibrations/{CALIBRATION}",
        {
            "code": CALIBRATION,
            "analyzer": ANALYZER,
            "product": PRODUCT,
            "from": "2026-01-10",
            "samples": 420,
            "latent_variables": {channel.code: channel.latent_variables for channel in CHANNELS},
            "standard_error_of_calibration": {
                channel.code: channel.standard_error_of_calibration for channel in CHANNELS
            },
            "adjustment": {channel.code: {"slope": 1.0, "bias": 0.0} for channel in CHANNELS},
            "flags": {"distance-from-calibration-set": {"largest": 3.0, "required": True}},
            "influences": {"sample_temperature": {"unit": "degC", "lower": 15, "upper": 30}},
        },
    )
    yield (
        f"/v1/laboratories/{LABORATORY}",
        {
            "code": LABORATORY,
            "kind": "laboratory",
            "methods": {
                **{
                    channel.code: {"method": channel.method, "trueness": _trueness(channel)}
                    for channel in CHANNELS
                },
                DERIVED: {"method": COMPUTED},
            },
        },
    )


def studies() -> Iterator[Document]:
    """Give the studies, in the order in which they build on each other."""
    for channel in CHANNELS:
        yield from _studies_of(channel.code)
    yield from _covariance_studies()


def design_studies() -> Iterator[tuple[Document, bytes]]:
    """Give the studies of the further designs as they come as CSV: what they are about, and the file."""
    for what, design, options in (
        ("days-and-runs", "nested_precision", {}),
        ("sampling", "sampling", {}),
        ("held-sample", "process_stream", {"held_sample": True}),
        ("stream", "process_stream", INCREMENTS),
        ("check-samples", "check_samples", {}),
        ("fleet", "fleet", {}),
        ("production", "production", {"steered_by_this_analyzer": True}),
    ):
        about: Document = {
            "code": f"moisture-{what}",
            "design": design,
            "product": PRODUCT,
            "characteristic": "moisture",
            "unit": "%",
            "calibrations": {ANALYZER: CALIBRATION},
            "done_on": _days_ago(20),
            "done_by": "laboratory",
            "options": options,
            "named_sources": [],
        }
        if what == "stream":
            # The variogram holds the analyzer's own error; only what is left is that of the increments.
            evidence = {"study": "moisture-scans", "estimate": "repeatability"}
            about["named_sources"] = [{"source": "analyzer_repeatability", "evidence": evidence}]
        yield about, data_folder().joinpath(f"moisture-{what}.csv").read_bytes()


def _covariance_studies() -> Iterator[Document]:
    """Give the studies of the three channels together: errors of one scan go together."""
    several = {"characteristics": [channel.code for channel in CHANNELS]}
    scans = _study("scan-cov", "covariance", "three-channel", "scans", days_ago=40, on_analyzer=True)
    yield {**scans, "characteristic": "protein", **several}
    pairs = _study(
        "pair-cov",
        "covariance",
        "three-channel",
        "pairs",
        days_ago=30,
        on_analyzer=True,
        laboratory=LABORATORY,
    )
    references = [
        {
            "source": "reference_repeatability",
            "quantity": channel.code,
            "evidence": {"study": f"{channel.code}-duplicates", "estimate": "repeatability"},
        }
        for channel in CHANNELS
    ]
    scans_source = {"study": "scan-cov", "estimate": "repeatability_covariance"}
    yield {
        **pairs,
        "characteristic": "protein",
        **several,
        "independent": True,
        "named_sources": [{"source": "analyzer_repeatability", "evidence": scans_source}, *references],
    }


def _studies_of(characteristic: str) -> Iterator[Document]:
    scans, determinations, pairs = (f"{characteristic}-{what}" for what in ("scans", "duplicates", "pairs"))
    yield _study(scans, "repeatability", characteristic, "replicate-scans", days_ago=40, on_analyzer=True)
    yield _study(
        determinations, "duplicates", characteristic, "duplicates", days_ago=38, laboratory=LABORATORY
    )
    named = {"analyzer_repeatability": scans, "reference_repeatability": determinations}
    yield {
        **_study(
            pairs,
            "agreement",
            characteristic,
            "validation-pairs",
            days_ago=30,
            on_analyzer=True,
            laboratory=LABORATORY,
        ),
        "independent": True,
        "named_sources": [
            {"source": source, "evidence": {"study": study, "estimate": "repeatability"}}
            for source, study in named.items()
        ],
    }


def budgets() -> Iterator[Document]:
    """Give the budgets of what the analyzer reads directly and a specification requires."""
    for channel in CHANNELS:
        if channel.code != "protein":
            yield budget(channel)
    yield derived_budget()


def budget(channel: Channel = CHANNELS[0]) -> Document:
    """Give the budget of one channel of the analyzer."""
    name = channel.code

    def component(code: str, quantity: str, level: str, evidence: Document) -> Document:
        return {"code": code, "quantity": quantity, "level": level, "evidence": evidence}

    def estimate(study: str, of: str) -> Document:
        return {"study": f"{name}-{study}", "estimate": of}

    lower, upper = channel.validated_range
    return {
        "code": budget_code(name),
        "product": PRODUCT,
        "characteristic": name,
        "unit": "%",
        "calibrations": {ANALYZER: CALIBRATION},
        "validated_range": {"lower": lower, "upper": upper},
        "coverage_probability": 0.95,
        "bias_treatment": "corrected",
        "model": {
            "expression": f"{name} - bias",
            "quantities": {
                name: {"unit": "%", "from": "reading"},
                "bias": {"unit": "%", "evidence": estimate("pairs", "bias")},
            },
        },
        "procedure": {
            "samples": {"least": 1, "plan": 1, "most": 3},
            "readings_per_sample": {"least": 2, "plan": 2, "most": 4},
        },
        "components": [
            component("repeatability", name, "reading", estimate("scans", "repeatability")),
            component("sampling", name, "sample", {"declaration": _sampling(channel)}),
            component("remainder", name, "lot", estimate("pairs", "remainder")),
            component("bias", "bias", "calibration", estimate("pairs", "bias")),
            component("reference-trueness", "bias", "reference", _of_laboratory(channel)),
        ],
        "correlations": [],
        "reason": "first budget of this calibration",
    }


def derived_budget() -> Document:
    """Give the budget of protein in solids-not-fat: an expression of three channels of one scan."""
    names = [channel.code for channel in CHANNELS]
    biases = {name: f"{name}_bias" for name in names}

    def joint(code: str, level: str, study: str, estimate: str, **quantities: str) -> Document:
        evidence = {"study": study, "estimate": estimate}
        return {"code": code, "quantities": quantities, "level": level, "evidence": evidence}

    own = dict(zip(names, names, strict=True))
    singles = [
        {
            "code": f"{channel.code}-{code}",
            "quantity": quantity,
            "level": level,
            "evidence": evidence,
        }
        for channel in CHANNELS
        for code, quantity, level, evidence in (
            ("sampling", channel.code, "sample", {"declaration": _sampling(channel)}),
            ("trueness", biases[channel.code], "reference", _of_laboratory(channel)),
        )
    ]
    return {
        **{name: value for name, value in budget().items() if name not in ("model", "components")},
        "code": budget_code(DERIVED),
        "characteristic": DERIVED,
        "validated_range": {"lower": 32.0, "upper": 40.0},
        "validated_ranges": {
            channel.code: {"lower": channel.validated_range[0], "upper": channel.validated_range[1]}
            for channel in CHANNELS
        },
        "model": {
            "expression": "100 * (protein - protein_bias) / "
            "(100 - (moisture - moisture_bias) - (fat - fat_bias))",
            "quantities": {
                **{name: {"unit": "%", "from": "reading"} for name in names},
                **{
                    biases[name]: {"unit": "%", "evidence": {"study": f"{name}-pairs", "estimate": "bias"}}
                    for name in names
                },
            },
        },
        "components": [
            joint("scan-repeatability", "reading", "scan-cov", "repeatability_covariance", **own),
            joint("scan-remainder", "lot", "pair-cov", "remainder_covariance", **own),
            joint("scan-bias", "calibration", "pair-cov", "bias_covariance", **biases),
            *singles,
        ],
    }


def specifications() -> Iterator[Document]:
    """Give the legal specification and that of a customer."""
    factor = {"kind": "guarded_by_factor", "multiple": 1, "coverage_probability": 0.95, "sides": 1}
    risk = {"kind": "guarded_by_specific_risk", "largest_risk": 0.05}
    legal = [
        _requirement("moisture", None, _limit(5.0), factor),
        _requirement("fat", _limit(26.0), _limit(42.0, inclusive=False), factor),
        _requirement(DERIVED, _limit(34.0), None, factor),
    ]
    customer = [
        _requirement("moisture", None, _limit(3.2), risk),
        _requirement("fat", _limit(26.2), _limit(28.0), risk),
    ]
    for code, kind, requires in (("legal", "legal", legal), ("customer-b", "customer", customer)):
        yield {
            "code": code,
            "product": PRODUCT,
            "kind": kind,
            "requires": requires,
            "not_judged": ["microbiology"],
            "reason": "first version",
        }


def _limit(value: float, *, inclusive: bool = True) -> Document:
    return {"value": value, "unit": "%", "inclusive": inclusive}


def _requirement(
    characteristic: str, lower: Document | None, upper: Document | None, rule: Document
) -> Document:
    methods = {channel.code: channel.method for channel in CHANNELS}
    return {
        "characteristic": characteristic,
        "method": methods.get(characteristic, COMPUTED),
        "judged": "lot_mean",
        "lower_tolerance_limit": lower,
        "upper_tolerance_limit": upper,
        "comparison": "absolute",
        "decimals": 2,
        "decision_rule": {**rule, "rejection": "at_tolerance_limit", "rounds": 1},
    }


def lots() -> Iterator[Document]:
    """Give a decision request for each of the production lots, the first lot first."""
    by_lot: dict[str, list[dict[str, str]]] = {}
    for row in rows_of("production-lots.csv"):
        by_lot.setdefault(row["lot"], []).append(row)
    last_day = max(int(row["day"]) for rows in by_lot.values() for row in rows)
    for lot, rows in by_lot.items():
        yield decision_request(lot, [_reading(row, last_day) for row in rows])


def decision_request(lot: str, readings: list[Document]) -> Document:
    """Give the request by which the line asks about a lot."""
    return {
        "lot": lot,
        "product": PRODUCT,
        "line": LINE,
        "operator": "shift 2",
        "units": {channel.code: "%" for channel in CHANNELS},
        "readings": readings,
    }


def reading(
    sample: str,
    taken_at: str,
    moisture: float,
    fat: float = 27.1,
    protein: float = 24.9,
    *,
    distance: float,
    temperature: float,
) -> Document:
    """Give one scan as the analyzer's computer sends it."""
    return {
        "sample": sample,
        "analyzer": ANALYZER,
        "calibration": CALIBRATION,
        "taken_at": taken_at,
        "values": {"moisture": moisture, "fat": fat, "protein": protein},
        "flags": {"distance-from-calibration-set": distance},
        "influences": {"sample_temperature": temperature},
    }


def _reading(row: dict[str, str], last_day: int) -> Document:
    # Day n of the file becomes so many days before today.
    day = datetime.now(UTC).date() - timedelta(days=last_day - int(row["day"]) + 1)
    taken_at = datetime.combine(day, time.fromisoformat(row["time"]), tzinfo=UTC)
    return reading(
        row["sample"],
        taken_at.isoformat(timespec="milliseconds"),
        *(float(row[channel.code]) for channel in CHANNELS),
        distance=float(row["distance_from_calibration_set"]),
        temperature=float(row["sample_temperature"]),
    )


def _trueness(channel: Channel) -> Document:
    return {
        "declaration": _declared(channel.trueness, "ring test 12, invented"),
        "stated_on": _days_ago(60),
        "serves_until": _days_ago(-305),
    }


def _of_laboratory(channel: Channel) -> Document:
    """Refer to the trueness that stands in the laboratory's entry."""
    return {"laboratory": LABORATORY, "component": "trueness", "characteristic": channel.code}


def _sampling(channel: Channel) -> Document:
    return _declared(channel.sampling, "sampling trial, invented")


def _declared(value: float, document: str) -> Document:
    return {
        "meaning": "standard_deviation",
        "value": value,
        "unit": "%",
        "reliability": 0.25,
        "document": document,
    }


def _study(
    code: str,
    design: str,
    characteristic: str,
    what: str,
    *,
    days_ago: int,
    on_analyzer: bool = False,
    laboratory: str | None = None,
) -> Document:
    file = f"{characteristic}-{what}.csv"
    content = data_folder().joinpath(file).read_bytes()
    header, *rows = csv.reader(content.decode("utf-8").splitlines())
    text_columns = {"sample", "pair", "group"}
    return {
        "code": code,
        "design": design,
        "product": PRODUCT,
        "characteristic": characteristic,
        "unit": "%",
        "calibrations": {ANALYZER: CALIBRATION} if on_analyzer else {},
        "laboratory": laboratory,
        "done_on": _days_ago(days_ago),
        "done_by": "laboratory",
        "columns": header,
        "rows": [
            [cell if name in text_columns else float(cell) for name, cell in zip(header, row, strict=True)]
            for row in rows
        ],
        "set_aside": [],
        "source": {"name": file, "sha256": hashlib.sha256(content).hexdigest()},
    }


def _days_ago(days: int) -> str:
    today: date = datetime.now(UTC).date()
    return (today - timedelta(days=days)).isoformat()
