import json
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import (
    Estimate,
    Evaluation,
    EvaluationWarning,
    Interval,
    MeanSquare,
    SetAside,
    Term,
    effective_degrees_of_freedom,
    merged,
)


@pytest.mark.parametrize(
    ("value", "nu"), [(-1.0, 3), (math.nan, 3), (math.inf, 3), (1.0, 0), (1.0, math.nan)]
)
def test_an_impossible_mean_square_is_refused(value, nu):
    with pytest.raises(EvidenceError):
        MeanSquare("s/x", value, nu)


def test_one_code_for_two_mean_squares_is_refused():
    with pytest.raises(EvidenceError, match="two different mean squares are called s/x"):
        merged([Term(1, MeanSquare("s/x", 1.0, 3)), Term(1, MeanSquare("s/x", 2.0, 3))])


def test_what_cancels_does_not_count():
    # Rule: SEP^2 = .09 (59), s_ref^2 = .02 (20), s_r^2 = .04 (10); remainder plus one reading. Counted twice,
    # s_r would give 10.3 (computed independently for the project's rules).
    sep, ref, rep = MeanSquare("sep", 0.09, 59), MeanSquare("ref", 0.02, 20), MeanSquare("rep", 0.04, 10)
    together = [Term(1, sep), Term(-1, ref), Term(-1, rep), Term(1, rep)]
    assert effective_degrees_of_freedom(together) == pytest.approx(31.2, abs=0.05)
    other = MeanSquare("another", 0.04, 10)
    assert effective_degrees_of_freedom([*together[:3], Term(1, other)]) == pytest.approx(10.3, abs=0.05)


def test_known_parts_alone_have_infinite_degrees_of_freedom():
    assert effective_degrees_of_freedom([Term(1, MeanSquare("a", 2.0, math.inf))]) == math.inf
    assert effective_degrees_of_freedom([Term(1, MeanSquare("a", 0.0, 5))]) == math.inf


@given(st.lists(st.tuples(st.floats(0.01, 100), st.floats(1, 200)), min_size=1, max_size=6))
def test_effective_degrees_of_freedom_lie_between_the_smallest_and_the_sum(parts):
    terms = [Term(1.0, MeanSquare(str(i), value, nu)) for i, (value, nu) in enumerate(parts)]
    nu = effective_degrees_of_freedom(terms)
    assert min(n for _, n in parts) * (1 - 1e-9) <= nu <= sum(n for _, n in parts) * (1 + 1e-9)


def test_a_negative_variance_has_no_standard_uncertainty(an_estimate):
    estimate = an_estimate(terms=(Term(-1.0, MeanSquare("a", 2.0, 5)),), usable=False)
    assert estimate.variance == -2
    assert estimate.standard_uncertainty is None
    assert estimate.to_document()["standard_uncertainty"] is None


def an_evaluation(*estimates: Estimate) -> Evaluation:
    return Evaluation(
        design="agreement",
        estimates=estimates,
        used=12,
        set_aside=(SetAside(3, "cup not filled"),),
        diagnostics={"ratio": math.inf, "list": (1, 2.5, None, True, "text"), "deep": {"nan": math.nan}},
        warnings=(EvaluationWarning("few-pairs", "few"),),
    )


def test_an_evaluation_survives_its_document(an_estimate):
    evaluation = an_evaluation(
        an_estimate("bias", value=0.03, interval=Interval(0.01, 0.05, 0.95, "t")),
        an_estimate("remainder", nu=math.inf, contains=("remainder",), taken_out=("repeatability",)),
    )
    document = json.loads(json.dumps(evaluation.to_document(), allow_nan=False))
    again = Evaluation.from_document(document)
    assert again.estimates == evaluation.estimates
    assert again.set_aside == evaluation.set_aside
    assert again.warnings == evaluation.warnings
    assert again.to_document() == document
    assert document["diagnostics"] == {
        "ratio": None,
        "list": [1, 2.5, None, True, "text"],
        "deep": {"nan": None},
    }


def test_an_estimate_is_found_by_name_or_because_it_is_the_only_one(an_estimate):
    first, second = an_estimate("bias"), an_estimate("remainder")
    assert an_evaluation(first).estimate() is first
    assert an_evaluation(first, second).estimate("remainder") is second
    with pytest.raises(EvidenceError, match="must be said; this evaluation has: bias, remainder"):
        an_evaluation(first, second).estimate()
    with pytest.raises(EvidenceError, match="there is no estimate 'sep'"):
        an_evaluation(first).estimate("sep")
