import json
import math
from dataclasses import replace

import numpy as np
import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.conformity import Tolerance, tails
from budgets.correlations import Correlation
from budgets.decision_rules import DecisionRule
from budgets.derived_release import DerivedReleaseRule, release_rule_kind
from budgets.error_distributions import StudentT
from budgets.errors import (
    ConvergenceError,
    EmptyAcceptanceError,
    LimitsError,
    ModelError,
    NotSupportedError,
    ProcedureError,
)
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts
from budgets.release import ReleaseRule

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
AT_LEAST = Tolerance(34.0, None)
EXPRESSION = "protein/(100 - moisture - fat)*100 - bias"
BOX = {"protein": (23.0, 27.0), "moisture": (2.0, 5.0), "fat": (24.0, 28.0)}
NOISE = ((0.04, 0.006, 0.0), (0.006, 0.0025, 0.0), (0.0, 0.0, 0.02))


def line(code, quantity, u, nu=40, level="lot", **changes):
    terms = (Term(1.0, MeanSquare(code, u * u, nu)),)
    members = {"code": code, "quantity": quantity, "level": level, "terms": terms, "evaluation_type": "A"}
    return Component(**{**members, **changes})


def a_budget(**changes):
    scan = MeanSquareMatrix("scan", ("protein", "moisture", "fat"), NOISE, 36)
    relative = (Term(1.0, MeanSquare("relative", 1e-6, 20)),)
    members = {
        "components": (
            line("scan", "", 1, level="reading", terms=(), quantities=scan.quantities,
                 matrix_terms=(MatrixTerm(1.0, scan),)),
            line("p", "protein", 0.1, relative_terms=relative),
            line("m", "moisture", 0.05),
            line("f", "fat", 0.1),
            line("b", "bias", 0.03, 59, "calibration"),
        ),
        "procedure": Procedure(Count(1, 1, 3), Count(1, 2, 4)),
        "coverage_probability": 0.95,
        "bias": None,
        "bias_treatment": "corrected",
        "validated_range": (30.0, 42.0),
        "model": MeasurementModel(
            EXPRESSION,
            (*(Quantity(name, "%") for name in BOX), Quantity("bias", "%", "given", 0.05)),
            "%",
        ),
        "correlations": (Correlation(("p", "m"), "lot", 0.3),),
        "validated_box": BOX,
    }  # fmt: skip
    return Budget(**{**members, **changes})


def compiled_rule(budget=None, rule=RISK, tolerance=AT_LEAST, counts=(2,), domain=(0.0, 100.0)):
    return DerivedReleaseRule.compile(budget or a_budget(), Counts(counts), tolerance, rule, domain=domain)


def judged(rule, at):
    """Return the verdict on the value of the model at a set of readings, and that value."""
    estimate = rule.law.at(at).estimate
    return rule.at(at).judge(estimate), estimate


def test_the_uncertainty_at_the_readings_agrees_with_a_simulation():
    rule = compiled_rule()
    at = {"protein": 24.4, "moisture": 3.5, "fat": 26.0}
    verdict, estimate = judged(rule, at)
    generator = np.random.default_rng(8)
    size = 200_000
    scans = generator.multivariate_normal([0, 0, 0], np.array(NOISE) / 2, size)
    lot = generator.multivariate_normal([0, 0], [[0.01, 0.3 * 0.005], [0.3 * 0.005, 0.0025]], size)
    # The proportional part is drawn with the absolute one of its component.
    scale = math.sqrt(1 + 1e-6 * 24.4**2 / 0.01)
    protein = 24.4 + scans[:, 0] + lot[:, 0] * scale
    moisture = 3.5 + scans[:, 1] + lot[:, 1]
    fat = 26.0 + scans[:, 2] + generator.normal(0, 0.1, size)
    y = protein / (100 - moisture - fat) * 100 - 0.05 + generator.normal(0, 0.03, size)
    assert verdict.combined_standard_uncertainty == pytest.approx(y.std(), rel=0.01)
    assert estimate == pytest.approx(24.4 / 70.5 * 100 - 0.05)
    assert rule.box.smallest_standard_uncertainty < verdict.combined_standard_uncertainty
    assert rule.box.points == 27
    assert rule.box.largest_difference < 0.01


def test_outcomes_by_the_limits_at_this_reading():
    rule = compiled_rule()
    seen = set()
    for protein in np.linspace(23.5, 25.5, 41):
        at = {"protein": float(protein), "moisture": 3.5, "fat": 26.0}
        verdict, estimate = judged(rule, at)
        here = rule.at(at)
        u, t = verdict.combined_standard_uncertainty, StudentT(here.effective_degrees_of_freedom)
        below, _ = tails(estimate, u, t, rule.tolerance)
        assert verdict.specific_consumers_risk == pytest.approx(below)
        expected = "release" if below <= 0.05 else "hold" if estimate >= 34.0 else "reject"
        assert verdict.outcome == expected
        at_limit, _ = tails(here.lower_acceptance_limit, u, t, rule.tolerance)
        assert at_limit == pytest.approx(0.05)
        assert here.expanded_uncertainty == here.coverage_factor * u
        seen.add(verdict.outcome)
    assert seen == {"release", "hold", "reject"}


def test_a_stored_rule_judges_the_same_to_the_last_bit():
    rule = compiled_rule()
    document = json.loads(json.dumps(rule.to_document()))
    stored = DerivedReleaseRule.from_document(document)
    assert stored == rule
    at = {"protein": 24.4, "moisture": 3.5, "fat": 26.0}
    assert judged(stored, at) == judged(rule, at)
    assert release_rule_kind(document) == "at_this_reading"
    assert release_rule_kind({"lower_tolerance_limit": 1.0}) == "fixed"
    endless = replace(rule, box=replace(rule.box, degrees_of_freedom_there=math.inf))
    assert DerivedReleaseRule.from_document(json.loads(json.dumps(endless.to_document()))) == endless


def test_readings_outside_of_the_validated_box_are_named():
    rule = compiled_rule()
    assert rule.outside({"protein": 22.0, "moisture": 3.0, "fat": 29.0, "other": 1.0}) == ("protein", "fat")
    with pytest.raises(ModelError) as caught:
        rule.at({"protein": 22.0, "moisture": 3.0})
    assert caught.value.where == ("estimates", "fat")


def test_where_the_rule_accepts_nothing_it_says_so():
    """The uncertainty grows with moisture; at the wet end nothing can be proved."""
    relative = (Term(1.0, MeanSquare("wet", 0.1**2, 20)),)
    components = (
        *a_budget().components[:2],
        line("m", "moisture", 0.05, relative_terms=relative),
        *a_budget().components[3:],
    )
    rule = compiled_rule(a_budget(components=components), tolerance=Tolerance(34.0, 35.3))
    assert rule.at({"protein": 24.5, "moisture": 2.0, "fat": 26.0}).lower_acceptance_limit is not None
    with pytest.raises(EmptyAcceptanceError, match="no estimate can be accepted"):
        rule.at({"protein": 23.7, "moisture": 5.0, "fat": 26.0})


def test_with_two_limits_both_must_be_met():
    rule = compiled_rule(tolerance=Tolerance(34.0, 38.0))
    assert judged(rule, {"protein": 25.0, "moisture": 3.5, "fat": 26.0})[0].outcome == "release"
    assert judged(rule, {"protein": 26.7, "moisture": 3.5, "fat": 26.0})[0].outcome == "hold"
    assert judged(rule, {"protein": 24.03, "moisture": 3.5, "fat": 26.0})[0].outcome == "hold"


def test_what_cannot_be_approved_is_refused():
    with pytest.raises(ProcedureError):
        compiled_rule(counts=(9,))
    with pytest.raises(ModelError, match="validated range of fat is missing") as caught:
        compiled_rule(a_budget(validated_box={k: v for k, v in BOX.items() if k != "fat"}))
    assert caught.value.where == ("validated_box",)
    with pytest.raises(EmptyAcceptanceError):
        compiled_rule(tolerance=Tolerance(34.0, 34.2))
    with pytest.raises(LimitsError, match="agreed for"):
        compiled_rule(rule=DecisionRule("simple", largest_standard_uncertainty=0.01))
    once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
    plain = Budget((line("r", "x", 0.1),), once, 0.95, None, "corrected", (0.0, 1.0))
    with pytest.raises(ModelError, match="fixed acceptance limits"):
        compiled_rule(plain, counts=(1,))
    with pytest.raises(ModelError):
        ReleaseRule.compile(a_budget(), Counts((2,)), Tolerance(34.0, None), RISK)


def a_plain_model(expression, box, u):
    components = tuple(line(f"c-{name}", name, u) for name in box)
    model = MeasurementModel(expression, tuple(Quantity(name) for name in box))
    return a_budget(
        components=components, model=model, correlations=(), validated_box=box, validated_range=(-1e9, 1e9)
    )


@pytest.mark.parametrize(
    ("expression", "box"),
    [("x**2", {"x": (0.3, 3.0)}), ("abs(x - 2)", {"x": (1.0, 2.9)}), ("exp(9*x)", {"x": (0.0, 1.0)})],
)
def test_a_model_that_curves_within_its_uncertainty_is_refused(expression, box):
    with pytest.raises(ModelError, match="the model curves within its uncertainty") as caught:
        compiled_rule(
            a_plain_model(expression, box, 0.2), tolerance=Tolerance(None, 5.0), domain=(None, None)
        )
    assert caught.value.where == ("validated_box",)


def test_a_model_that_fails_in_the_box_is_refused():
    with pytest.raises(ModelError, match="may have no value"):
        compiled_rule(a_plain_model("1/x", {"x": (0.0, 2.0)}, 0.01), tolerance=Tolerance(None, 5.0))


def test_many_quantities():
    box = {f"x{i}": (1.0, 2.0) for i in range(6)}
    rule = compiled_rule(a_plain_model("+".join(box), box, 0.1), tolerance=Tolerance(None, 12.0), counts=(1,))
    assert rule.box.points == 64
    box = {f"x{i}": (1.0, 2.0) for i in range(9)}
    with pytest.raises(NotSupportedError, match="more than 8"):
        compiled_rule(a_plain_model("+".join(box), box, 0.1), tolerance=Tolerance(None, 12.0))


def test_derivatives_that_disagree_stop_an_approval(monkeypatch):
    """A fault in one of the two ways would be seen: here one is bent on purpose."""
    right = MeasurementModel.sensitivity_coefficients

    def bent(self, estimates):
        return {name: slope * (1 + 1e-4) for name, slope in right(self, estimates).items()}

    monkeypatch.setattr(MeasurementModel, "sensitivity_coefficients", bent)
    with pytest.raises(ConvergenceError, match="two ways"):
        compiled_rule()


def test_the_rule_at_a_reading_has_its_own_figures():
    rule = compiled_rule()
    at = {"protein": 24.4, "moisture": 3.5, "fat": 26.0}
    fixed = rule.at(at)
    assert fixed.combined_standard_uncertainty == rule.law.at(at).standard_uncertainty
    assert fixed.effective_degrees_of_freedom == rule.law.at(at).effective_degrees_of_freedom
    assert fixed.guard_band_lower == pytest.approx(fixed.lower_acceptance_limit - rule.tolerance.lower)
    assert fixed.largest_specific_risk == pytest.approx(rule.decision_rule.largest_risk)


def test_a_rule_that_cannot_be_used_at_a_reading_says_so():
    rule = compiled_rule()
    impossible = replace(rule, decision_rule=DecisionRule("simple", largest_standard_uncertainty=1e-9))
    with pytest.raises(LimitsError):
        impossible.at({"protein": 24.4, "moisture": 3.5, "fat": 26.0})
