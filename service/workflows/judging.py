"""A lot judged: pure, from the register and the request to the content of the entry that records it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any, Final

from budgets.errors import BudgetsError
from budgets.judgements import Judgement
from budgets.release import ReleaseRule
from budgets.rounded_comparison import without_averaging_noise
from budgets.sureness import Sureness, sureness
from service.documents import DecisionRequest, Requirement
from service.ledger import read_instant
from service.workflows.calendar import NOTICE
from service.workflows.earlier_looks import FIRST_LOOK, EarlierLooks
from service.workflows.further_looks import changed_terms, looks_after, next_look, stated_rule
from service.workflows.holds import Hold
from service.workflows.lot_risk import LotRisk, lot_risk
from service.workflows.measured import Measured, measure
from service.workflows.prior_figures import lapsed_prior, prior_figures
from service.workflows.register import BudgetInForce, Register, SpecificationInForce
from service.workflows.replicate_checks import judge_replicates, level_of
from service.workflows.request_checks import check_request
from service.workflows.rule_figures import FIGURES, figures_of
from service.workflows.rules import rule_here
from service.workflows.stuck_sensors import StuckSensors, stuck_before
from service.workflows.wording import IN_GUARD_BAND, about_the_value, display

# The worst verdict decides the lot.
SEVERITY: Final = {"release": 0, "hold": 1, "reject": 2}

CAUTION: Final = (
    "This answer speaks of the named characteristics only; it is no safety clearance. Local regulations and "
    "the plant's authorised person decide on the lot."
)


@dataclass(frozen=True)
class Weighed:
    """What was measured for a requirement, held against its rule; not judged where a hold forbids it.

    ``estimate`` is the one that is compared, ``limits`` says how the acceptance limits are to be read,
    ``replicates`` what their check found.
    """

    requirement: Requirement
    measured: Measured
    estimate: float | None
    rule: ReleaseRule | None
    limits: str | None
    holds: tuple[Hold, ...]
    replicates: dict[str, Any] | None
    judgement: Judgement | None


@dataclass(frozen=True)
class Ruling:
    """One verdict with the reasons that led to it.

    ``rounds_left`` says how often it lets the lot be read again, ``next_look`` what to read then.
    """

    verdict: dict[str, Any]
    reasons: tuple[dict[str, Any], ...]
    rounds_left: int = 1
    next_look: str | None = None

    def with_next_look(self) -> Ruling:
        """Have the reason that is about the value say what to read next."""
        if self.next_look is None:
            return self
        reasons = tuple(
            {**reason, "next": self.next_look} if reason["code"] == IN_GUARD_BAND else reason
            for reason in self.reasons
        )
        return replace(self, reasons=reasons)


def judge(
    register: Register,
    request: DecisionRequest,
    recorded_at: str,
    earlier: EarlierLooks = FIRST_LOOK,
    *,
    stuck: StuckSensors | None = None,
) -> dict[str, Any]:
    """Judge a lot by what is in force; gives the answer but for its place in the record.

    The readings of a further look are joined with all those before it. ``stuck`` are the channels that showed
    the same digits too often, which only the record can tell.

    Raises
    ------
    InvalidRequest, Conflict
        The request is not understood; see request_checks and measured.
    """
    check_request(register, request, read_instant(recorded_at))
    request = earlier.joined(register, request)
    judged: dict[str, Measured] = {}

    def measured(code: str) -> Measured:
        if code not in judged:
            seen = earlier.counted(code).readings
            found = measure(register, request, code, recorded_at, seen, stuck or {})
            judged[code] = replace(found, holds=(*found.holds, *stuck_before(earlier.decisions, code)))
        return judged[code]

    codes = request.specifications
    if codes is None:
        codes = register.products[request.product].default_specifications
    rulings: list[Ruling] = []
    together: list[dict[str, Any]] = []
    not_judged: dict[str, None] = {}
    for code in codes:
        specification = register.specifications.get(code)
        # A product may name a code before it is given to a specification, which may be another product's.
        if specification is None or specification.document.product != request.product:
            rulings.append(_nothing_in_force(code))
            continue
        not_judged.update(dict.fromkeys(specification.document.not_judged))
        weighed = [
            _weigh(
                register,
                specification,
                requirement,
                measured(requirement.characteristic),
                recorded_at,
                earlier,
            )
            for requirement in specification.document.requires
        ]
        risk = lot_risk(
            register,
            specification,
            [(each.requirement, each.measured, each.judgement) for each in weighed],
            recorded_at,
        )
        together.append(risk.figures)
        rulings += [_rule_on(register, specification, each, risk, earlier) for each in weighed]
    if not codes:
        rulings.append(_nothing_in_force(None))
    notices = _notices(judged, recorded_at)
    return _answer(request, rulings, together, tuple(not_judged), recorded_at, notices, earlier)


def _answer(
    request: DecisionRequest,
    rulings: list[Ruling],
    together: list[dict[str, Any]],
    not_judged: tuple[str, ...],
    recorded_at: str,
    notices: list[dict[str, Any]],
    earlier: EarlierLooks,
) -> dict[str, Any]:
    outcomes = [ruling.verdict["outcome"] for ruling in rulings]
    outcome = max(outcomes, key=SEVERITY.__getitem__)
    # A lot that is held for several reasons can be read again only as often as each of them allows.
    held = [ruling for ruling in rulings if ruling.verdict["outcome"] == "hold"]
    rounds_left = min(ruling.rounds_left for ruling in held) if outcome == "hold" else 0
    if rounds_left > 0:
        rulings = [ruling.with_next_look() for ruling in rulings]
    return {
        "recorded_at": recorded_at,
        "lot": request.lot,
        "product": request.product,
        "line": request.line,
        "round": earlier.round,
        "rounds_left": rounds_left,
        "joins": list(earlier.identities),
        "outcome": outcome,
        "reasons": [reason for ruling in rulings for reason in ruling.reasons],
        "verdicts": [ruling.verdict for ruling in rulings],
        "joint_conformance": together,
        "not_judged": list(not_judged),
        "notices": notices,
        "caution": CAUTION,
    }


# --- one verdict ---------------------------------------------------------------------------------------


def _weigh(
    register: Register,
    specification: SpecificationInForce,
    requirement: Requirement,
    measured: Measured,
    recorded_at: str,
    earlier: EarlierLooks,
) -> Weighed:
    rule, limits, unusable = _release_rule(register, specification, requirement, measured, earlier)
    level = level_of(requirement.decision_rule, register.plant)
    repeated = judge_replicates(measured.replicates, level)
    lapsed = lapsed_prior(register, specification, requirement.characteristic, recorded_at)
    holds = (*measured.holds, *repeated.holds, *unusable, *lapsed)
    estimate = None if measured.estimate is None else without_averaging_noise(measured.estimate)
    judgement = None
    if rule is not None and estimate is not None and not holds:
        judgement = rule.judge(estimate)
    return Weighed(requirement, measured, estimate, rule, limits, holds, repeated.figures, judgement)


def _rule_on(
    register: Register,
    specification: SpecificationInForce,
    weighed: Weighed,
    risk: LotRisk,
    earlier: EarlierLooks,
) -> Ruling:
    requirement, measured, rule = weighed.requirement, weighed.measured, weighed.rule
    characteristic = register.characteristics[specification.document.product, requirement.characteristic]
    judgement, estimate, holds = weighed.judgement, weighed.estimate, weighed.holds
    # What is accepted by itself is held when the lot as a whole is not.
    if judgement is not None and judgement.outcome == "release" and (hold := risk.hold(requirement)):
        judgement, holds = replace(judgement, outcome="hold"), (*holds, hold)
    sure = shown = None
    if rule is not None and estimate is not None:
        sure = None if judgement is None else sureness(rule, estimate)
        shown = display(rule, estimate, judgement, sure, characteristic, weighed.limits)
    outcome = "hold" if judgement is None else judgement.outcome
    verdict = {
        "characteristic": requirement.characteristic,
        "unit": characteristic.unit,
        "specification": _reference(specification),
        "outcome": outcome,
        "estimate": estimate,
        **_figures(rule, weighed.limits, judgement),
        **_sureness(sure),
        "prior": prior_figures(rule, requirement.decision_rule, estimate, judged=judgement is not None),
        "judged": requirement.judged,
        "items": _items(rule, requirement),
        "decision_rule": stated_rule(requirement),
        "budget": None if measured.budget is None else _budget_reference(measured.budget),
        "samples": measured.samples,
        "readings": measured.readings,
        "replicates": weighed.replicates,
        "display": shown,
    }
    reasons = [_reason(hold, requirement.characteristic, specification) for hold in holds]
    if rule is not None and estimate is not None and not holds and outcome != "release":
        value_hold = about_the_value(rule, estimate, outcome, characteristic.unit)
        reasons.append(_reason(value_hold, requirement.characteristic, specification))
    looks = looks_after(earlier, requirement, measured, compared=judgement is not None)
    left = requirement.decision_rule.rounds - looks
    further = None
    if judgement is not None and judgement.outcome == "hold" and not holds and left > 0:
        further = next_look(register, specification, requirement, measured, looks)
    return Ruling(verdict, tuple(reasons), left, further)


def _release_rule(
    register: Register,
    specification: SpecificationInForce,
    requirement: Requirement,
    measured: Measured,
    earlier: EarlierLooks,
) -> tuple[ReleaseRule | None, str | None, tuple[Hold, ...]]:
    """Find the stored rule for what was done, as it is at these readings, and how its limits are to be read.

    There is no rule when there is nothing to apply it to.
    """
    nothing = measured.budget is None or measured.done is None or measured.estimate is None
    if nothing or any(hold.code == "too-few-readings" for hold in measured.holds):
        return None, None, ()
    assert measured.budget is not None and measured.done is not None and measured.estimate is not None
    try:
        looks = looks_after(earlier, requirement, measured, compared=True)
        rule = register.rule(specification, requirement, measured.budget, measured.done, looks)
        here = rule_here(rule, measured.means, measured.estimate, measured.sample_means)
        changed = changed_terms(earlier, specification, requirement, measured.budget, here)
        return here, rule.acceptance_limits, changed
    except BudgetsError as error:
        hold = Hold(
            "cannot-be-proved", error.message, "Read as the procedure plans. A person decides on this lot."
        )
        return None, None, (hold,)


def _figures(rule: ReleaseRule | None, limits: str | None, judgement: Judgement | None) -> dict[str, Any]:
    """Write the figures of the rule, and the probabilities where the reading can be trusted."""
    return {
        **(dict.fromkeys(FIGURES) if rule is None else figures_of(rule, limits)),
        "conformance_probability": None if judgement is None else judgement.conformance_probability,
        "specific_consumers_risk": None if judgement is None else judgement.specific_consumers_risk,
    }


def _items(rule: ReleaseRule | None, requirement: Requirement) -> dict[str, Any] | None:
    """Write what the items must meet, and the spread that was used; null where the mean is judged."""
    if requirement.judged != "item":
        return None
    spread = None if rule is None else rule.items
    nu = None if spread is None else spread.degrees_of_freedom
    return {
        "least_share": requirement.item_share,
        "spread": requirement.item_spread,
        "standard_deviation": None if spread is None else spread.item_standard_deviation,
        "degrees_of_freedom": None if nu == float("inf") else nu,
    }


def _sureness(found: Sureness | None) -> dict[str, Any]:
    """Write how sure the uncertainty itself is; null where it is taken as known, or nothing was judged."""
    if found is None:
        return {"standard_uncertainty_interval": None, "conformance_probability_interval": None}
    return {
        "standard_uncertainty_interval": {
            "lower": found.lower_standard_uncertainty,
            "upper": found.upper_standard_uncertainty,
            "coverage_probability": found.coverage_probability,
        },
        "conformance_probability_interval": {
            "lower": found.lower_conformance_probability,
            "upper": found.upper_conformance_probability,
        },
    }


def _nothing_in_force(code: str | None) -> Ruling:
    """Rule on a specification that is asked for but not in force, or on a product without any."""
    what = (
        "No specification is in force for this product."
        if code is None
        else f"No version of {code} for this product is in force."
    )
    specification = None if code is None else {"code": code, "version": None}
    reason = {
        "code": "nothing-in-force",
        "characteristic": None,
        "specification": specification,
        "detail": what,
        "next": "Have a version approved. A person decides on this lot.",
    }
    verdict = {
        "characteristic": None,
        "unit": None,
        "specification": specification,
        "outcome": "hold",
        "estimate": None,
        **_figures(None, None, None),
        **_sureness(None),
        "prior": None,
        "judged": None,
        "items": None,
        "decision_rule": None,
        "budget": None,
        "samples": 0,
        "readings": 0,
        "replicates": None,
        "display": None,
    }
    return Ruling(verdict, (reason,))


# --- words and references ------------------------------------------------------------------------------


def _reference(specification: SpecificationInForce) -> dict[str, Any]:
    return {"code": specification.document.code, "version": specification.version}


def _budget_reference(budget: BudgetInForce) -> dict[str, Any]:
    return {"code": budget.document.code, "version": budget.version, "digest": budget.digest}


def _reason(hold: Hold, characteristic: str, specification: SpecificationInForce) -> dict[str, Any]:
    return {
        "code": hold.code,
        "characteristic": characteristic,
        "specification": _reference(specification),
        "detail": hold.detail,
        "next": hold.next,
    }


def _notices(judged: dict[str, Measured], recorded_at: str) -> list[dict[str, Any]]:
    """Announce evidence that lapses soon, once per budget."""
    now: datetime = read_instant(recorded_at)
    notices = {}
    for measured in judged.values():
        budget = measured.budget
        if budget is None or budget.lapses_at is None or recorded_at >= budget.lapses_at:
            continue
        left = read_instant(budget.lapses_at) - now
        if left <= NOTICE:
            notices[budget.document.code] = {
                "code": "evidence-lapses",
                "at": budget.lapses_at,
                "detail": f"The evidence behind {budget.document.code} serves {left.days} more days.",
            }
    return [*notices.values(), *_extension_notices(judged)]


def _extension_notices(judged: dict[str, Measured]) -> list[dict[str, Any]]:
    """Say which evidence serves beyond its time, once per budget and study."""
    notices = {}
    for measured in judged.values():
        if (budget := measured.budget) is None:
            continue
        for extension in budget.extensions:
            notices[budget.document.code, extension["study"]] = {
                "code": "evidence-extended",
                "at": extension["lapses_at"],
                "detail": f"The study {extension['study']} behind {budget.document.code} serves beyond its "
                f"time until {extension['until']}; its uncertainty is widened by the factor "
                f"{extension['widening_factor']:g}.",
            }
    return list(notices.values())
