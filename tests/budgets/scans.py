"""Components and budgets of a scan of three channels, valid by default."""

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix
from budgets.measurement_models import MeasurementModel, Quantity

NAMES = ("protein", "moisture", "fat")
NOISE = ((0.04, 0.012, -0.004), (0.012, 0.0225, 0.002), (-0.004, 0.002, 0.03))
LOT = ((0.02, 0.004, 0.0), (0.004, 0.01, 0.001), (0.0, 0.001, 0.015))
MEANS = {"protein": 25.0, "moisture": 3.0, "fat": 27.0}
DRY = "100 * protein / (100 - moisture - fat)"


def line(code, quantity, u, nu=40, level="lot", **changes):
    terms = (Term(1.0, MeanSquare(code, u * u, nu)),)
    members = {"code": code, "quantity": quantity, "level": level, "terms": terms, "evaluation_type": "A"}
    return Component(**{**members, **changes})


def joint_line(code, level, matrix, names=NAMES):
    square = MeanSquareMatrix(code, names, matrix, 36)
    members = {"terms": (), "quantities": names, "matrix_terms": (MatrixTerm(1.0, square),)}
    return line(code, "", 1, level=level, **members)


def a_scan_budget(expression=DRY, *, reading=NOISE, more=(), given=(), **changes):
    """Give a budget with a model: noise of the scan and errors of the lot, each with its covariances."""
    members = {
        "components": (joint_line("noise", "reading", reading), joint_line("lot", "lot", LOT), *more),
        "procedure": Procedure(Count(1, 1, 3), Count(1, 2, 4)),
        "coverage_probability": 0.95,
        "bias": None,
        "bias_treatment": "corrected",
        "validated_range": (1.0, 90.0),
        "model": MeasurementModel(expression, (*(Quantity(name) for name in NAMES), *given)),
    }
    return Budget(**{**members, **changes})
