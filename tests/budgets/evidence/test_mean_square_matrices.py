import json
import math

import pytest

from budgets.components import Component
from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Estimate, MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix, covariance_of, projected

MATRIX = MeanSquareMatrix("v/scan", ("protein", "fat"), ((0.04, 0.01), (0.01, 0.09)), 12)


def an_estimate(*terms, **changes):
    members = {"name": "covariance", "terms": (), "value": None, "interval": None, "may_feed": ("reading",)}
    return Estimate(**{**members, "usable": True, "matrix_terms": terms, **changes})


@pytest.mark.parametrize(
    ("quantities", "value", "nu"),
    [
        (("a",), ((1.0, 0.0), (0.0, 1.0)), 9),
        (("a", "a"), ((1.0, 0.0), (0.0, 1.0)), 9),
        (("a", "b"), ((1.0, 0.5), (0.4, 1.0)), 9),
        (("a", "b"), ((1.0, math.nan), (math.nan, 1.0)), 9),
        (("a", "b"), ((-1.0, 0.0), (0.0, 1.0)), 9),
        (("a", "b"), ((1.0, 0.0), (0.0, 1.0)), 0),
    ],
)
def test_a_matrix_that_cannot_be_is_refused(quantities, value, nu):
    with pytest.raises(EvidenceError):
        MeanSquareMatrix("v/scan", quantities, value, nu)


def test_terms_add_up_and_project():
    other = MeanSquareMatrix("r/fat", ("protein", "fat"), ((0.0, 0.0), (0.0, 0.02)), math.inf)
    terms = (MatrixTerm(1.0, MATRIX), MatrixTerm(-0.5, other))
    assert covariance_of(terms).tolist() == [[0.04, 0.01], [0.01, 0.08]]
    # c'Sc, by hand
    term = projected(terms[0], (1.0, -2.0))
    assert term.coefficient == pytest.approx(0.04 - 0.04 + 0.36)
    single = projected(terms[1], (1.0, -2.0))
    assert single == Term(-2.0, MeanSquare("r/fat", 0.02, math.inf))
    with pytest.raises(EvidenceError, match="different quantities"):
        covariance_of((terms[0], MatrixTerm(1.0, MeanSquareMatrix("x", ("a",), ((1.0,),), 9))))


def test_an_estimate_with_a_matrix_survives_its_document():
    known = MeanSquareMatrix("r/fat", ("protein", "fat"), ((0.0, 0.0), (0.0, 0.02)), math.inf)
    relative = (Term(1.0, MeanSquare("s1", 1e-4, 8)),)
    estimate = an_estimate(MatrixTerm(1.0, MATRIX), MatrixTerm(-1.0, known), relative_terms=relative)
    assert Estimate.from_document(json.loads(json.dumps(estimate.to_document()))) == estimate


def test_documents_of_the_first_version_still_load():
    document = an_estimate().to_document()
    assert not {"relative_terms", "matrix_terms"} & set(document)
    del document["reading_weight"]
    assert Estimate.from_document(document) == an_estimate()


def test_a_component_of_several_quantities_takes_the_names_of_the_model():
    estimate = an_estimate(MatrixTerm(1.0, MATRIX))
    component = Component.from_estimate("scan", "", None, estimate, "A", quantities={"fat": "milk_fat"})
    assert (component.inputs, component.quantity) == (("protein", "milk_fat"), "")
    assert Component.from_estimate("scan", "passed over", None, estimate, "A").inputs == ("protein", "fat")
