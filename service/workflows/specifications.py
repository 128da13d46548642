"""Specifications as versioned documents: what a draft must meet, and the rules compiled at approval."""

from __future__ import annotations

from typing import Any, Final

from budgets.units import conversion
from service.documents import BudgetDocument, Characteristic, Requirement, Specification, ToleranceLimit
from service.errors import Fault, InvalidRequest
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_validation import Findings, stored_tables
from service.workflows.budgets import rules_of_pair
from service.workflows.evidence import FaultCollector
from service.workflows.production_priors import check_prior
from service.workflows.rules import RuleKey, decision_rule, tolerance
from service.workflows.stored_budgets import budget_from_evaluation
from service.workflows.versioned_kind import Approval, VersionedKind


def _check(unit_of_work: UnitOfWork, document: Specification) -> None:
    collector = FaultCollector()
    if unit_of_work.master.get("product", document.product) is None:
        collector.add("#/product", f"there is no product {document.product!r}", "the code of a product")
        collector.finish("The specification refers to what does not exist.")
    _check_product_is_kept(unit_of_work, document, collector)
    seen: set[str] = set()
    for index, requirement in enumerate(document.requires):
        pointer = f"#/requires/{index}"
        if requirement.characteristic in seen:
            collector.add(
                f"{pointer}/characteristic", "is required twice", "one requirement per characteristic"
            )
        seen.add(requirement.characteristic)
        _check_requirement(unit_of_work, document, requirement, pointer, collector)
    collector.finish("The specification does not fit.")


def _check_product_is_kept(
    unit_of_work: UnitOfWork, document: Specification, collector: FaultCollector
) -> None:
    owner = unit_of_work.versions.products("specification").get(document.code)
    if owner is not None and owner != document.product:
        collector.add("#/product", f"{document.code!r} is a specification of {owner!r}", f"{owner!r}")


def _check_requirement(
    unit_of_work: UnitOfWork,
    document: Specification,
    requirement: Requirement,
    pointer: str,
    collector: FaultCollector,
) -> None:
    key = f"{document.product}/{requirement.characteristic}"
    stored = unit_of_work.master.get("characteristic", key)
    if stored is None:
        collector.add(
            f"{pointer}/characteristic", f"there is no characteristic {key!r}", "one of the product"
        )
        return
    characteristic = load(Characteristic, stored.document)
    before = len(collector.faults)
    limits = {
        "lower_tolerance_limit": requirement.lower_tolerance_limit,
        "upper_tolerance_limit": requirement.upper_tolerance_limit,
    }
    for name, limit in limits.items():
        if limit is not None:
            _check_unit(limit, characteristic, f"{pointer}/{name}/unit", collector)
    if len(collector.faults) == before:
        collector.attempt(pointer, tolerance, requirement, characteristic)
    collector.attempt(f"{pointer}/decision_rule", decision_rule, requirement.decision_rule)
    _check_production(unit_of_work, document, requirement, characteristic, pointer, collector)
    domain = characteristic.natural_domain
    if requirement.within_domain and domain.lower is None and domain.upper is None:
        collector.add(
            f"{pointer}/within_domain",
            f"{requirement.characteristic} has no natural domain",
            "false, or a natural domain",
        )
    one_sided = None in limits.values()
    if one_sided and requirement.decision_rule.least_capability_index is not None:
        collector.add(
            f"{pointer}/decision_rule/least_capability_index",
            "a capability index needs two tolerance limits",
            "largest_standard_uncertainty, for one limit",
        )


def _check_production(
    unit_of_work: UnitOfWork,
    document: Specification,
    requirement: Requirement,
    characteristic: Characteristic,
    pointer: str,
    collector: FaultCollector,
) -> None:
    """Check what a decision rule says of the production, where it says anything."""
    rule = requirement.decision_rule
    at = f"{pointer}/decision_rule"
    if rule.kind == "guarded_by_global_risk" and document.kind == "legal":
        collector.add(
            f"{at}/kind",
            "a legal limit holds for every lot, not on the average of a production",
            "guarded_by_specific_risk or guarded_by_factor",
        )
    if rule.prior is None:
        return
    if characteristic.derived_from:
        detail = "not supported yet: a production prior of a characteristic computed from several"
        collector.add(f"{at}/prior", detail, "no prior")
        return
    collector.attempt(f"{at}/prior", check_prior, unit_of_work, rule.prior, characteristic, f"{at}/prior")


def _check_unit(
    limit: ToleranceLimit, characteristic: Characteristic, pointer: str, collector: FaultCollector
) -> None:
    if limit.unit not in characteristic.accepted_units:
        collector.add(pointer, f"got {limit.unit!r}", f"one of {', '.join(characteristic.accepted_units)}")
        return
    collector.attempt(pointer, conversion, limit.unit, characteristic.unit)


def _approval(
    unit_of_work: UnitOfWork, stored: StoredVersion, document: Specification, found: Findings
) -> Approval:
    rules: list[tuple[RuleKey, dict[str, Any]]] = []
    faults: list[Fault] = []
    for version in unit_of_work.versions.all_in_force():
        if version.kind != "budget" or version.product != document.product:
            continue
        budget_document = load(BudgetDocument, version.document)
        assert version.evaluation is not None  # stored at approval, without exception
        budget = budget_from_evaluation(budget_document, version.evaluation)
        try:
            rules.extend(
                rules_of_pair(
                    unit_of_work,
                    document,
                    stored.version,
                    budget_document,
                    version.version,
                    budget,
                    stored_tables(version.evaluation),
                )
            )
        except InvalidRequest as error:
            faults.extend(error.faults)
    if faults:
        raise InvalidRequest("This measurement cannot prove this specification.", faults=tuple(faults))
    return Approval(rules=tuple(rules))


SPECIFICATION: Final = VersionedKind(
    name="specification",
    document_class=Specification,
    subject=lambda document: (document.product, None),
    check=_check,
    approval=_approval,
)
