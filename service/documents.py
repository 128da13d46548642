"""The documents that travel between plant, service and record, as frozen dataclasses.

service/schemas/ reads and writes their JSON form; workflows work on these. Instants are aware datetimes,
dates are plant-local dates, null limits are None.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, datetime, time
from typing import Any

# --- who acts -----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Actor:
    """Who makes a request: a machine's token, or a person (then ``person`` is the account's code)."""

    principal: str
    roles: frozenset[str]
    person: str | None = None


@dataclass(frozen=True)
class Signature:
    """What a person gives once more to sign an act."""

    password: str = field(repr=False)


@dataclass(frozen=True)
class SignedAct:
    """The body of approve, return and withdraw."""

    reason: str
    signature: Signature


# --- master data --------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Product:
    """What is made and judged, with the specifications that a decision uses when it names none."""

    code: str
    name: str
    default_specifications: tuple[str, ...] = ()
    external_codes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Bounds:
    """A closed interval; None is no bound."""

    lower: float | None = None
    upper: float | None = None


@dataclass(frozen=True)
class Characteristic:
    """A measurand of a product: its unit, the units accepted for it and where its values can lie."""

    code: str
    product: str
    unit: str
    accepted_units: tuple[str, ...]
    basis: str
    natural_domain: Bounds
    decimals: int
    derived_from: tuple[str, ...] | None = None
    external_codes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Line:
    """A production line; the order of its analyzers is the order of fallback."""

    code: str
    name: str
    analyzers: tuple[str, ...]
    external_codes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Analyzer:
    """An instrument with the channels that it reads directly."""

    code: str
    kind: str
    channels: tuple[str, ...]
    decimals: Mapping[str, int] = field(default_factory=dict)
    external_codes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class FlagLimit:
    """A figure that the analyzer sends with a scan, and the largest value at which the scan counts."""

    largest: float
    required: bool


@dataclass(frozen=True)
class InfluenceBounds:
    """The range of an influence quantity in which the calibration was validated."""

    unit: str
    lower: float | None
    upper: float | None
    required: bool = True


@dataclass(frozen=True)
class Adjustment:
    """The slope and bias adjustment that the analyzer itself applies to a channel."""

    slope: float
    bias: float


@dataclass(frozen=True)
class Calibration:
    """A version of the model in an analyzer, for one product."""

    code: str
    analyzer: str
    product: str
    starts_on: date
    samples: int | None = None
    latent_variables: Mapping[str, int] = field(default_factory=dict)
    standard_error_of_calibration: Mapping[str, float] = field(default_factory=dict)
    adjustment: Mapping[str, Adjustment] = field(default_factory=dict)
    flags: Mapping[str, FlagLimit] = field(default_factory=dict)
    influences: Mapping[str, InfluenceBounds] = field(default_factory=dict)
    external_codes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class DeclaredEvidence:
    """A stated figure and what it means; ``estimate`` chooses where the meaning gives several.

    ``declaration`` keeps the members of budgets.declarations.Declaration as they were given. ``stated_on``
    and ``serves_until`` date the figure; one that says how long it serves lapses as a study does.
    """

    declaration: Mapping[str, Any]
    estimate: str | None = None
    stated_on: date | None = None
    serves_until: date | None = None


@dataclass(frozen=True)
class StudyEvidence:
    """An estimate of a recorded study."""

    study: str
    estimate: str


StatedEvidence = StudyEvidence | DeclaredEvidence


@dataclass(frozen=True)
class LaboratoryEvidence:
    """A component of a laboratory as its entry in the master data has it when the reference is resolved.

    ``characteristic`` may be left out where only one is spoken of.
    """

    laboratory: str
    component: str
    characteristic: str | None = None


Evidence = StudyEvidence | DeclaredEvidence | LaboratoryEvidence


@dataclass(frozen=True)
class LaboratoryMethod:
    """A reference method as a laboratory runs it, with what is known of its errors, each by its evidence.

    ``repeatability`` is of one determination, ``run`` what runs of the method differ by beside that,
    ``trueness`` what the laboratory as a whole may be off.
    """

    method: str
    trueness: StatedEvidence | None = None
    repeatability: StatedEvidence | None = None
    run: StatedEvidence | None = None


@dataclass(frozen=True)
class Laboratory:
    """A laboratory that gives reference values; methods by characteristic."""

    code: str
    kind: str
    methods: Mapping[str, LaboratoryMethod]
    external_codes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Plant:
    """All that can change a verdict and belongs to no product; approved like a specification.

    ``replicate_level`` holds where a rule names none; ``identical_readings`` in a row are those of a sensor
    that is stuck.
    """

    time_zone: str
    lapse_hour: time
    working_days: tuple[str, ...]
    serving_days: Mapping[str, int]
    reason: str
    replicate_level: float | None = None
    identical_readings: int = 8


# --- specifications -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class ToleranceLimit:
    """A limit of the permitted true value."""

    value: float
    unit: str
    inclusive: bool = True


@dataclass(frozen=True)
class SteeredReadings:
    """How the readings of a steered process go with its true values, observed on the same lots."""

    mean: float
    standard_deviation: float
    correlation: float


@dataclass(frozen=True)
class DeclaredPrior:
    """A production prior as someone states it; ``known_from`` is true_values or readings."""

    unit: str
    steered_by_this_analyzer: bool
    document: str
    mean: float | None = None
    standard_deviation: float | None = None
    degrees_of_freedom: float | None = None
    values: tuple[float, ...] = ()
    known_from: str = "true_values"
    readings: SteeredReadings | None = None


@dataclass(frozen=True)
class StatedPrior:
    """How the true values of lots are distributed: by a production study or by a declaration, one of them."""

    distribution: str = "normal"
    study: str | None = None
    declaration: DeclaredPrior | None = None


@dataclass(frozen=True)
class RuleOfDecision:
    """The decision rule of a requirement as the document states it (contracts.md, section 5)."""

    kind: str
    multiple: float | None = None
    coverage_probability: float | None = None
    sides: int | None = None
    largest_risk: float | None = None
    largest_standard_uncertainty: float | None = None
    least_capability_index: float | None = None
    specific_risk_cap: float | None = None
    prior: StatedPrior | None = None
    rejection: str = "at_tolerance_limit"
    rounds: int = 1
    replicate_level: float | None = None
    largest_lot_risk: float | None = None


@dataclass(frozen=True)
class Requirement:
    """What one characteristic must meet, and by which rule that is decided.

    ``comparison`` rounded: estimates are rounded to ``decimals`` before they are compared. ``within_domain``:
    probabilities are those given that the true value lies in the natural domain of the characteristic.
    ``item_share`` and ``item_spread`` belong to ``judged`` item: the least share of the items that must lie
    within the limits, and where their spread is taken from.
    """

    characteristic: str
    lower_tolerance_limit: ToleranceLimit | None
    upper_tolerance_limit: ToleranceLimit | None
    decision_rule: RuleOfDecision
    method: str | None = None
    judged: str = "lot_mean"
    comparison: str = "absolute"
    decimals: int | None = None
    within_domain: bool = False
    item_share: float | None = None
    item_spread: str | None = None


@dataclass(frozen=True)
class Specification:
    """What a product must meet, for whom."""

    code: str
    product: str
    kind: str
    requires: tuple[Requirement, ...]
    reason: str
    not_judged: tuple[str, ...] = ()


# --- budgets ------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Quantity:
    """A quantity of the measurement model: the reading itself, or one that evidence stands behind."""

    unit: str
    source: str | None = None
    evidence: Evidence | None = None


@dataclass(frozen=True)
class Model:
    """The measurement model: an expression over named quantities."""

    expression: str
    quantities: Mapping[str, Quantity]


@dataclass(frozen=True)
class PlannedCount:
    """How many: at least, as planned, at most."""

    least: int
    plan: int
    most: int


@dataclass(frozen=True)
class PlannedProcedure:
    """How many samples of a lot are read how often."""

    samples: PlannedCount
    readings_per_sample: PlannedCount


@dataclass(frozen=True)
class BudgetComponent:
    """A line of the budget: which quantity, at which level it is drawn anew, what stands behind it.

    Errors of several quantities that go together are one line: ``quantities`` says what a column of the study
    is called in the model, and ``quantity`` is None. ``relative_to`` names the quantity that a proportional
    part is proportional to, where that is another one.
    """

    code: str
    quantity: str | None
    level: str
    evidence: Evidence
    quantities: Mapping[str, str] = field(default_factory=dict)
    relative_to: str | None = None


@dataclass(frozen=True)
class TypeBSource:
    """The document that a figure was taken from."""

    document: str
    edition: str | None = None
    sha256: str | None = None


@dataclass(frozen=True)
class BudgetCorrelation:
    """A correlation between two lines of the budget that are drawn anew together."""

    between: tuple[str, str]
    level: str
    coefficient: float
    evidence: TypeBSource


@dataclass(frozen=True)
class BudgetDocument:
    """An uncertainty budget of one characteristic as it was drafted."""

    code: str
    product: str
    characteristic: str
    unit: str
    calibrations: Mapping[str, str]
    validated_range: Bounds
    coverage_probability: float
    bias_treatment: str
    model: Model
    procedure: PlannedProcedure
    components: tuple[BudgetComponent, ...]
    reason: str
    correlations: tuple[BudgetCorrelation, ...] = ()
    validated_ranges: Mapping[str, Bounds] = field(default_factory=dict)


# --- studies ------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class SetAsideRow:
    """A row that does not count, and why."""

    row: int
    reason: str


@dataclass(frozen=True)
class NamedSource:
    """A source that is known to be inside a standard error of prediction, with its own evidence.

    ``quantity`` says whose error it is in a study of several characteristics.
    """

    source: str
    evidence: Evidence
    quantity: str | None = None


@dataclass(frozen=True)
class DataSource:
    """The file that the rows came from."""

    name: str
    sha256: str | None = None


Cell = float | int | str | None | Mapping[str, float]


@dataclass(frozen=True)
class Study:
    """A body of test data with a design; ``characteristics`` names all of them where it is about several.

    ``options`` are what the design takes beside its data; the design refuses those that it does not know.
    ``reference_methods`` says by which method the laboratory measured each of them; it is filled in when the
    study is recorded, so that a laboratory may change its method without changing what an old study says.
    """

    code: str
    design: str
    product: str
    characteristic: str
    unit: str
    done_on: date
    columns: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    calibrations: Mapping[str, str] = field(default_factory=dict)
    laboratory: str | None = None
    reference_methods: Mapping[str, str] = field(default_factory=dict)
    serves_until: date | None = None
    done_by: str | None = None
    procedure: str | None = None
    independent: bool | None = None
    named_sources: tuple[NamedSource, ...] = ()
    characteristics: tuple[str, ...] = ()
    set_aside: tuple[SetAsideRow, ...] = ()
    source: DataSource | None = None
    options: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class Replacement:
    """The study that takes the place of another one behind every budget, and why.

    ``evaluated_anew`` gives codes for what is evaluated once more because it took the old study out of its
    scatter, each by the code of the study that it was.
    """

    study: str
    reason: str
    evaluated_anew: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Extension:
    """A study let serve until another day, with its uncertainty widened; signed by an approver."""

    until: date
    widening_factor: float
    reason: str
    signature: Signature


@dataclass(frozen=True)
class StudyPlanRequest:
    """What a study is wanted for: to know a standard deviation, to find a bias; a wish by its members."""

    precision: Mapping[str, Any] | None = None
    bias: Mapping[str, Any] | None = None


# --- set points and improvements -----------------------------------------------------------------------


@dataclass(frozen=True)
class StatedVariation:
    """How the lots vary: taken from the record, from a study of the design production, or stated.

    ``source`` is record, study or stated. Of a steered process the variation of reference values
    (``true_standard_deviation``) is needed beside that of its readings.
    """

    source: str
    steered_by_this_analyzer: bool | None = None
    study: str | None = None
    first_day: date | None = None
    last_day: date | None = None
    mean: float | None = None
    lot_to_lot: float | None = None
    drift: float | None = None
    within_lot: float | None = None
    true_standard_deviation: float | None = None
    reading_standard_deviation: float | None = None


@dataclass(frozen=True)
class WantedShares:
    """The share of lots to be released, and the largest share of released lots that do not conform."""

    release_rate: float
    largest_risk: float | None = None


@dataclass(frozen=True)
class StatedMoney:
    """What closeness, holds, further looks and wrong releases are worth, in one currency."""

    currency: str
    lot_size: float
    quantity_unit: str
    lots_per_year: float
    value_of_one_unit: float
    cost_of_hold: float
    cost_of_retest: float
    cost_of_nonconforming: float
    cost_of_not_released: float | None = None


@dataclass(frozen=True)
class LookNumbers:
    """What is done at every look at a lot."""

    samples: int
    readings_per_sample: int
    increments_per_sample: int = 1


@dataclass(frozen=True)
class SetPointRequest:
    """How close to the limit may the process run? Figures are in ``unit``, set points those of readings."""

    product: str
    characteristic: str
    analyzer: str
    unit: str
    process_variation: StatedVariation
    wanted: WantedShares
    specifications: tuple[str, ...] | None = None
    procedure: LookNumbers | None = None
    money: StatedMoney | None = None
    towards: str | None = None
    wanted_set_point: float | None = None


@dataclass(frozen=True)
class ImprovementOption:
    """Something that can be bought; ``kind`` says which of the members it has."""

    code: str
    kind: str
    cost_per_lot: float = 0.0
    cost_per_year: float = 0.0
    samples: int | None = None
    readings_per_sample: int | None = None
    increments_per_sample: int | None = None
    looks: int | None = None
    component: str | None = None
    standard_uncertainty: float | None = None
    factor: float | None = None
    degrees_of_freedom: float | None = None
    standard_deviation: float | None = None
    determinations: int | None = None
    instead_of: int | None = None
    pairs: int | None = None
    budget: str | None = None
    version: int | None = None


@dataclass(frozen=True)
class ImprovementsRequest:
    """What to buy first, of the options, at a production as a set point is asked for."""

    production: SetPointRequest
    options: tuple[ImprovementOption, ...]


@dataclass(frozen=True)
class RecordedPrior:
    """A production as the record shows it: the first look at every lot, by the days of the readings."""

    steered_by_this_analyzer: bool
    first_day: date | None = None
    last_day: date | None = None


@dataclass(frozen=True)
class AskedPrior(StatedPrior):
    """A production prior that may be taken from the record too."""

    record: RecordedPrior | None = None


@dataclass(frozen=True)
class LotReadings:
    """How a lot is read: so many samples, so many readings of each."""

    samples: int
    readings_per_sample: int


@dataclass(frozen=True)
class GlobalRisksRequest:
    """What does a rule let pass, and hold back, over a whole production? Guard bands are in ``unit``."""

    product: str
    characteristic: str
    analyzer: str
    specification: str
    unit: str
    prior: AskedPrior
    procedure: LotReadings | None = None
    guard_bands: tuple[float, ...] | None = None
    largest_risk: float | None = None


@dataclass(frozen=True)
class GiveawayRequest:
    """What running further from the limit than needed cost, over the lots of a period."""

    production: SetPointRequest
    first_day: date | None = None
    last_day: date | None = None


@dataclass(frozen=True)
class MonteCarloRequest:
    """How a budget is held against a Monte Carlo run.

    ``trials``: null for as many as the tolerance needs; ``significant_digits`` of the standard uncertainty
    give the tolerance, null takes 5 % of it; ``at`` are the readings, null for the middle of what was
    validated.
    """

    trials: int | None = None
    seed: int = 1
    significant_digits: int | None = None
    at: Mapping[str, float] | None = None


# --- decisions ----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Reading:
    """A scan: one look of one analyzer at one sample, a value per channel in the request's units."""

    sample: str
    analyzer: str
    calibration: str
    taken_at: datetime
    values: Mapping[str, float]
    flags: Mapping[str, float] = field(default_factory=dict)
    influences: Mapping[str, float] = field(default_factory=dict)
    measurement: str | None = None
    presentation: str | None = None
    increment: str | None = None
    session: str | None = None
    weight: float | None = None


@dataclass(frozen=True)
class DecisionRequest:
    """The readings of a lot, to be judged against specifications (the product's own when None)."""

    lot: str
    product: str
    line: str
    units: Mapping[str, str]
    readings: tuple[Reading, ...]
    specifications: tuple[str, ...] | None = None
    operator: str | None = None


@dataclass(frozen=True)
class RetestRequest:
    """Further readings of a lot on hold, to be judged together with all earlier ones."""

    line: str
    units: Mapping[str, str]
    readings: tuple[Reading, ...]
    operator: str | None = None
