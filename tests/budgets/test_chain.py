"""From raw data to a judged lot: the evidence of two studies and a declaration in one budget."""

import numpy as np
import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.declarations import Declaration, evaluate
from budgets.errors import ComponentError
from budgets.evidence.evaluation import Evaluation
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study
from budgets.propagation import Counts, combined
from budgets.release import ReleaseRule

TRUE = {"s_r": 0.03, "rest": 0.05, "s_ref": 0.02, "bias": 0.04}


@pytest.fixture(scope="module")
def evidence() -> dict[str, Evaluation]:
    generator = np.random.default_rng(12)
    scans = [(f"P{i}", 3 + i / 20 + generator.normal(0, TRUE["s_r"])) for i in range(20) for _ in range(4)]
    twice = [(f"D{i}", 3 + i / 20 + generator.normal(0, TRUE["s_ref"])) for i in range(30) for _ in range(2)]
    pairs = []
    for i in range(60):
        truth = generator.uniform(2, 4.5)
        shown = truth + TRUE["bias"] + generator.normal(0, TRUE["rest"])
        for _ in range(2):
            reading = shown + generator.normal(0, TRUE["s_r"])
            pairs.append((f"V{i}", reading, truth + generator.normal(0, TRUE["s_ref"])))
    repeatability = evaluate_study(
        "repeatability", StudyData(("sample", "reading"), tuple(scans)), study="rep"
    )
    duplicates = evaluate_study("duplicates", StudyData(("sample", "result"), tuple(twice)), study="dup")
    agreement = evaluate_study(
        "agreement",
        StudyData(("pair", "reading", "reference"), tuple(pairs)),
        study="val",
        options={"independent": True},
        named_sources=[
            NamedSource("analyzer_repeatability", repeatability.estimate()),
            NamedSource("reference_repeatability", duplicates.estimate()),
        ],
    )
    ring = evaluate(Declaration("standard_deviation", 0.03, reliability=0.25), code="ring")
    return {"rep": repeatability, "val": agreement, "ring": ring}


def a_budget(*components: Component, bias: float) -> Budget:
    procedure = Procedure(Count(1, 1, 3), Count(1, 2, 4))
    return Budget(components, procedure, 0.95, bias, "corrected", (2.1, 4.4))


def test_the_budget_recovers_the_true_error_of_a_corrected_reading(evidence):
    val = evidence["val"]
    budget = a_budget(
        Component.from_estimate("r", "moisture", None, evidence["rep"].estimate(), "A"),
        Component.from_estimate("rest", "moisture", None, val.estimate("remainder"), "A"),
        Component.from_estimate("bias", "bias", None, val.estimate("bias"), "A"),
        Component.from_estimate("trueness", "bias", "reference", evidence["ring"].estimate(), "B"),
        bias=val.estimate("bias").value,
    )
    result = combined(budget, Counts((2,)))
    # rest^2 + s_r^2 / 2 + u(b)^2 + trueness^2, with the values put into the simulation.
    sep = TRUE["rest"] ** 2 + TRUE["s_r"] ** 2 / 2 + TRUE["s_ref"] ** 2 / 2
    true = TRUE["rest"] ** 2 + TRUE["s_r"] ** 2 / 2 + sep / 60 + 0.03**2
    assert result.variance == pytest.approx(true, rel=0.25)
    assert val.estimate("bias").interval.lower < TRUE["bias"] < val.estimate("bias").interval.upper
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    compiled = ReleaseRule.compile(budget, Counts((2,)), Tolerance(None, 4.0), rule, domain=(0.0, 100.0))
    assert compiled.judge(3.5).outcome == "release"
    assert compiled.judge(3.99).outcome == "hold"
    assert compiled.judge(4.2).outcome == "reject"


def test_two_readings_as_in_the_study_give_back_its_standard_error_less_the_reference(evidence):
    """The repeatability cancels: what was taken out with 1/2 comes back with 1/2."""
    val = evidence["val"]
    parts = (
        Component.from_estimate("r", "moisture", None, evidence["rep"].estimate(), "A"),
        Component.from_estimate("rest", "moisture", None, val.estimate("remainder"), "A"),
    )
    budget = Budget(parts, Procedure(Count(1, 1, 1), Count(2, 2, 2)), 0.95, None, "corrected", (2.1, 4.4))
    result = combined(budget, Counts((2,)))
    reference = next(t for t in val.estimate("remainder").terms if t.mean_square.code.startswith("dup/"))
    sep = val.estimate("standard_error_of_prediction").variance
    expected = sep + reference.coefficient * reference.mean_square.value
    assert result.variance == pytest.approx(expected, rel=1e-12)
    nu = expected**2 / (sep**2 / 59 + (expected - sep) ** 2 / reference.mean_square.degrees_of_freedom)
    assert result.effective_degrees_of_freedom == pytest.approx(nu, rel=1e-9)


def test_the_standard_error_of_prediction_whole_does_not_fall_with_more_readings(evidence):
    val = evidence["val"]
    whole = Component.from_estimate(
        "sep", "moisture", None, val.estimate("standard_error_of_prediction"), "A"
    )
    beyond = Component.from_estimate(
        "beyond", "moisture", None, val.estimate("repeatability_beyond_study"), "A"
    )
    bias = Component.from_estimate("bias", "bias", None, val.estimate("bias"), "A")
    budget = a_budget(whole, beyond, bias, bias=0.04)
    one, two, four = (combined(budget, Counts((n,))).variance for n in (1, 2, 4))
    assert one == pytest.approx(two + evidence["rep"].estimate().variance / 2)
    assert two == four
    with pytest.raises(ComponentError, match="counted twice"):
        a_budget(
            whole,
            Component.from_estimate("r", "moisture", None, evidence["rep"].estimate(), "A"),
            bias,
            bias=0.04,
        )


def test_a_whole_standard_error_and_the_bias_of_the_same_pairs_are_one_term(evidence):
    """SEP^2 (1 + 1/n) is one mean square with n - 1 degrees of freedom, not two of 59."""
    val = evidence["val"]
    budget = a_budget(
        Component.from_estimate("sep", "moisture", None, val.estimate("standard_error_of_prediction"), "A"),
        Component.from_estimate("beyond", "moisture", None, val.estimate("repeatability_beyond_study"), "A"),
        Component.from_estimate("bias", "bias", None, val.estimate("bias"), "A"),
        bias=0.04,
    )
    result = combined(budget, Counts((2,)))
    sep = val.estimate("standard_error_of_prediction").variance
    assert result.variance == pytest.approx(sep * (1 + 1 / 60), rel=1e-12)
    assert result.effective_degrees_of_freedom == pytest.approx(59, rel=1e-12)


def test_the_trueness_of_the_laboratory_is_added_and_never_shrinks(evidence):
    """All reference values of a study share it: no number of pairs, samples or readings makes it smaller."""
    val = evidence["val"]
    parts = (
        Component.from_estimate("r", "moisture", None, evidence["rep"].estimate(), "A"),
        Component.from_estimate("rest", "moisture", None, val.estimate("remainder"), "A"),
        Component.from_estimate("bias", "bias", None, val.estimate("bias"), "A"),
    )
    ring = Component.from_estimate("trueness", "bias", None, evidence["ring"].estimate(), "B")
    assert ring.level == "reference"
    for counts in (Counts((1,)), Counts((4,)), Counts((4, 4, 4))):
        without = combined(a_budget(*parts, bias=0.04), counts).variance
        beside = combined(a_budget(*parts, ring, bias=0.04), counts).variance
        assert beside - without == pytest.approx(0.03**2)
