"""The register: all that a decision needs and that is in force, read once per revision of the database."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any, Final

from budgets.budget import Budget
from budgets.budget_validation import ErrorTables
from budgets.item_rules import LotSpreadRule
from budgets.production_priors import ProductionPrior
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.replicates import ReplicateLaw
from budgets.shared_errors import NamedBudget, SharedErrors
from service.documents import (
    Analyzer,
    BudgetDocument,
    Calibration,
    Characteristic,
    Line,
    Plant,
    Product,
    Requirement,
    Specification,
)
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_validation import stored_tables
from service.workflows.calendar import DEFAULT_PLANT
from service.workflows.production_priors import prior_lapses_at
from service.workflows.rules import AnyRule, RuleKey, compile_rule, counts_text, pattern_text, stored_rule
from service.workflows.stored_budgets import budget_from_evaluation

# Unbalanced numbers of readings are many; beyond this bound they are compiled anew each time.
MOST_COMPILED: Final = 10_000


@dataclass(frozen=True)
class SpecificationInForce:
    """A specification version that decisions may be made on."""

    version: int
    document: Specification


@dataclass(frozen=True)
class BudgetInForce:
    """A budget version that decisions may be made on, rebuilt from what was stored at its approval."""

    version: int
    document: BudgetDocument
    budget: Budget
    digest: str
    lapses_at: str | None
    extensions: tuple[Mapping[str, Any], ...] = ()
    tables: ErrorTables | None = None


@dataclass(frozen=True)
class Outlook:
    """What a further look would be: the variances of the estimates now and then, and what they share.

    An acceptance limit that there is not is infinite.
    """

    before: float
    shared: float
    then: float
    lower_acceptance_limit: float
    upper_acceptance_limit: float
    effective_degrees_of_freedom: float


@dataclass
class Register:
    """What is in force at one revision; ``compiled`` keeps rules for counts that no approval foresaw."""

    revision: int
    plant: Plant
    products: Mapping[str, Product]
    characteristics: Mapping[tuple[str, str], Characteristic]
    lines: Mapping[str, Line]
    analyzers: Mapping[str, Analyzer]
    calibrations: Mapping[str, Calibration]
    specification_products: Mapping[str, str]
    specifications: Mapping[str, SpecificationInForce]
    budgets: Mapping[tuple[str, str, str], BudgetInForce]
    rules: Mapping[RuleKey, AnyRule]
    prior_lapses: Mapping[tuple[str, str], str] = field(default_factory=dict)
    compiled: dict[RuleKey, AnyRule] = field(default_factory=dict)
    outlooks: dict[tuple[RuleKey, int, int], Outlook] = field(default_factory=dict)
    replicate_laws: dict[tuple[str, int, str, frozenset[str]], ReplicateLaw] = field(default_factory=dict)
    shared: dict[tuple[str, tuple[str, ...], tuple[str, ...]], SharedErrors] = field(default_factory=dict)

    def rule(
        self,
        specification: SpecificationInForce,
        requirement: Requirement,
        budget: BudgetInForce,
        done: Counts | ReadingPattern,
        looks: int = 1,
    ) -> AnyRule:
        """Give the stored rule for what was done; compile it from the stored budget where none was stored.

        ``looks`` says over how many looks it was done: the procedure counts for each of them.
        """
        characteristic = self.characteristics[budget.document.product, requirement.characteristic]
        key = self.rule_key(specification, requirement, budget, done)
        rule = self.rules.get(key) or self.compiled.get(key)
        if rule is None:
            used, tables = budget.budget, budget.tables
            if looks > 1:
                used = replace(used, procedure=used.procedure.joined(looks))
            rule = compile_rule(
                used,
                done,
                requirement,
                characteristic,
                distribution=None if tables is None else tables.of(done),
                risk_per_look=self.risks_per_look.get(_pair(key)),
                prior=self._prior(key) if requirement.decision_rule.prior is not None else None,
            )
            if len(self.compiled) < MOST_COMPILED:
                self.compiled[key] = rule
        return rule

    def _prior(self, wanted: RuleKey) -> ProductionPrior:
        """Give the prior that the approval stored with the rules of the same pair."""
        return next(
            rule.production.prior
            for key, rule in self.rules.items()
            if replace(key, counts=wanted.counts) == wanted
            and isinstance(rule, ReleaseRule)
            and rule.production is not None
        )

    def replicate_law(self, budget: BudgetInForce, quantity: str, levels: frozenset[str]) -> ReplicateLaw:
        """Give what separates readings of one sample, with the levels drawn anew between them."""
        key = (budget.document.code, budget.version, quantity, levels)
        law = self.replicate_laws.get(key)
        if law is None:
            law = self.replicate_laws[key] = ReplicateLaw.compile(budget.budget, quantity, levels)
        return law

    def shared_errors(
        self,
        done: Counts | ReadingPattern,
        budgets: Sequence[BudgetInForce],
        others: Sequence[BudgetInForce],
        named: Callable[[BudgetInForce], NamedBudget],
    ) -> SharedErrors:
        """Give what the errors have in common of characteristics that were read in the same scans."""
        one, other = (tuple(budget.document.code for budget in each) for each in (budgets, others))
        key = (_done_text(done), one, other)
        errors = self.shared.get(key)
        if errors is None:
            errors = SharedErrors(tuple(map(named, budgets)), done, tuple(map(named, others)))
            if len(self.shared) < MOST_COMPILED:
                self.shared[key] = errors
        return errors

    def rule_key(
        self,
        specification: SpecificationInForce,
        requirement: Requirement,
        budget: BudgetInForce,
        done: Counts | ReadingPattern,
    ) -> RuleKey:
        """Name the rule for what was done."""
        return RuleKey(
            specification=specification.document.code,
            specification_version=specification.version,
            characteristic=requirement.characteristic,
            budget=budget.document.code,
            budget_version=budget.version,
            counts=_done_text(done),
        )

    @cached_property
    def risks_per_look(self) -> Mapping[RuleKey, float | None]:
        """The risk that each look may take, found at approval, by what does not depend on what was done."""
        # Rules on the items of a lot have one round.
        return {
            _pair(key): None if isinstance(rule, LotSpreadRule) else rule.risk_per_look
            for key, rule in self.rules.items()
        }


def _pair(key: RuleKey) -> RuleKey:
    """Give what all rules of a budget and a requirement have in common."""
    return replace(key, counts="")


def _done_text(done: Counts | ReadingPattern) -> str:
    return counts_text(done) if isinstance(done, Counts) else pattern_text(done)


def load_register(unit_of_work: UnitOfWork, revision: int) -> Register:
    """Read everything that is in force in the transaction of ``unit_of_work``."""
    in_force = unit_of_work.versions.all_in_force()
    specifications = [version for version in in_force if version.kind == "specification"]
    budgets = [_budget_in_force(version) for version in in_force if version.kind == "budget"]
    plants = [version for version in in_force if version.kind == "plant"]
    characteristics = _masters(unit_of_work, "characteristic", Characteristic)
    return Register(
        revision=revision,
        plant=load(Plant, plants[0].document) if plants else DEFAULT_PLANT,
        products={product.code: product for product in _masters(unit_of_work, "product", Product)},
        characteristics={(item.product, item.code): item for item in characteristics},
        lines={line.code: line for line in _masters(unit_of_work, "line", Line)},
        analyzers={analyzer.code: analyzer for analyzer in _masters(unit_of_work, "analyzer", Analyzer)},
        calibrations={item.code: item for item in _masters(unit_of_work, "calibration", Calibration)},
        specification_products=unit_of_work.versions.products("specification"),
        specifications={
            version.code: SpecificationInForce(version.version, load(Specification, version.document))
            for version in specifications
        },
        budgets={
            (budget.document.product, budget.document.characteristic, analyzer): budget
            for budget in budgets
            for analyzer in budget.document.calibrations
        },
        rules={RuleKey.of(stored): stored_rule(stored.numbers) for stored in unit_of_work.rules.in_force()},
        prior_lapses=_prior_lapses(unit_of_work, specifications),
    )


def _prior_lapses(
    unit_of_work: UnitOfWork, specifications: Sequence[StoredVersion]
) -> dict[tuple[str, str], str]:
    """Say, by specification and characteristic, when the study behind a rule by global risk lapses."""
    found = {}
    for version in specifications:
        for requirement in load(Specification, version.document).requires:
            rule = requirement.decision_rule
            stated = rule.prior if rule.kind == "guarded_by_global_risk" else None
            lapses_at = None if stated is None else prior_lapses_at(unit_of_work, stated)
            if lapses_at is not None:
                found[version.code, requirement.characteristic] = lapses_at
    return found


def _masters(unit_of_work: UnitOfWork, kind: str, document_class: type[Any]) -> list[Any]:
    return [load(document_class, stored.document) for stored in unit_of_work.master.all(kind)]


def _budget_in_force(version: StoredVersion) -> BudgetInForce:
    document = load(BudgetDocument, version.document)
    assert version.evaluation is not None  # stored at approval, without exception
    return BudgetInForce(
        version=version.version,
        document=document,
        budget=budget_from_evaluation(document, version.evaluation),
        digest=version.evaluation["digest"],
        lapses_at=version.lapses_at,
        extensions=tuple(version.evaluation.get("extensions", ())),
        tables=stored_tables(version.evaluation),
    )


class RegisterCache:
    """Keeps the register of the newest revision that this process has seen; safe for threads."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._register: Register | None = None

    def current(self, unit_of_work: UnitOfWork) -> Register:
        """Give the register at the revision that ``unit_of_work`` sees; reads it anew when that has moved."""
        revision = unit_of_work.revision()
        if unit_of_work.revision_moved:
            # An approval in this very transaction: should it be rolled back, its number is given again.
            return load_register(unit_of_work, revision)
        register = self._register
        if register is not None and register.revision == revision:
            return register
        with self._lock:
            if self._register is None or self._register.revision != revision:
                self._register = load_register(unit_of_work, revision)
            return self._register
