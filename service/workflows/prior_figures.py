"""What a production prior says beside a verdict, as answers and the record show it."""

from __future__ import annotations

from typing import Any

from budgets.posterior_conformity import PosteriorConformity
from budgets.release import ReleaseRule
from budgets.reporting import probability_text
from service.documents import RuleOfDecision
from service.workflows.holds import Hold
from service.workflows.register import Register, SpecificationInForce


def prior_figures(
    rule: ReleaseRule | None, stated: RuleOfDecision, estimate: float | None, *, judged: bool
) -> dict[str, Any] | None:
    """Write the prior of a rule, and what it says of this lot; null where the rule names none."""
    if rule is None or rule.production is None or stated.prior is None or estimate is None:
        return None
    known, prior = rule.production, rule.production.prior
    posterior = known.posterior(rule.tolerance, estimate) if judged else None
    source: dict[str, str | None] = {"study": stated.prior.study, "document": None}
    if stated.prior.declaration is not None:
        source["document"] = stated.prior.declaration.document
    return {
        **source,
        "distribution": prior.distribution,
        "mean": prior.mean,
        "standard_deviation": prior.standard_deviation,
        "known_from": prior.anchor,
        "steered_by_this_analyzer": prior.steering is not None,
        "global_consumers_risk": known.global_consumers_risk,
        "global_producers_risk": known.global_producers_risk,
        "release_rate": known.release_rate,
        "used": None if posterior is None else posterior.used,
        "conflict": None if posterior is None else posterior.conflict,
        "conformance_probability": None if posterior is None else posterior.conformance_probability,
        "specific_consumers_risk": None if posterior is None else posterior.specific_consumers_risk,
        "statement": None if posterior is None else _statement(posterior),
    }


def lapsed_prior(
    register: Register, specification: SpecificationInForce, characteristic: str, recorded_at: str
) -> tuple[Hold, ...]:
    """Hold where the study that a rule by global risk rests on has lapsed."""
    lapses_at = register.prior_lapses.get((specification.document.code, characteristic))
    if lapses_at is None or recorded_at < lapses_at:
        return ()
    hold = Hold(
        "evidence-lapsed",
        f"The production study behind the rule of {specification.document.code} served until {lapses_at}.",
        "Study the production anew and approve the specification with it. A person decides on this lot.",
    )
    return (hold,)


def _statement(posterior: PosteriorConformity) -> str:
    if posterior.conformance_probability is None:
        return (
            f"The reading lies {posterior.conflict:.1f} standard deviations from where the production prior "
            "expects it; the prior was left out."
        )
    text = probability_text(posterior.conformance_probability)
    return f"With the production prior the lot conforms with a probability of {text}; the verdict is without."
