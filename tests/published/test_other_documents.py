"""Published tables and examples beside JCGM 100; "from memory" where the data files say so."""

import math

import pytest
from scipy.special import chdtri

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.conformity import Tolerance, conformance_probability, tails
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.screening import (
    cochran_critical_value,
    grubbs_critical_value,
    grubbs_pair_critical_values,
)
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.evidence.sums import standard_deviation_factors
from budgets.propagation import Counts, combined, coverage_factor


def test_end_gauge_with_second_order_terms(case):
    """NIST TN 1297, Table D.1: components found, the total from memory."""
    published = case("nist_tn_1297", "tn1297-D.1")
    once = Count(1, 1, 1)
    components = tuple(
        Component(
            item["name"],
            "length",
            "lot",
            (Term(1.0, MeanSquare(item["name"], item["u"] ** 2, math.inf)),),
            "B",
        )
        for item in published.inputs["components"]
    )
    budget = Budget(components, Procedure(once, once), 0.95, None, "corrected", (0.0, 1.0))
    published.holds("uc", combined(budget, Counts((1,))).standard_uncertainty)


def test_monthly_mean_of_daily_temperatures(case):
    """NIST TN 1900, example E2 (from memory)."""
    published = case("nist_tn_1900", "tn1900-E2")
    readings = published.inputs["x"]
    data = StudyData(("sample", "reading"), tuple(("month", x) for x in readings))
    evaluation = evaluate_study("repeatability", data, study="month")
    estimate = evaluation.estimate()
    mean = evaluation.diagnostics["groups"][0]["mean"]
    u = estimate.standard_uncertainty / math.sqrt(len(readings))
    k = coverage_factor(published.inputs["p"], estimate.degrees_of_freedom)
    for name, value in {
        "n": evaluation.used,
        "mean": mean,
        "s": estimate.standard_uncertainty,
        "u": u,
        "k": k,
        "lower": mean - k * u,
        "upper": mean + k * u,
    }.items():
        published.holds(name, value)


@pytest.mark.parametrize("identity", ["jcgm106-7.3.3-ex1", "jcgm106-7.4"])
def test_conformance_probabilities(case, identity):
    """JCGM 106:2012, 7.3.3 example 1 and 7.4 (from memory)."""
    published = case("jcgm_106", identity)
    i = published.inputs
    tolerance = Tolerance(i.get("TL"), i["TU"])
    published.holds("pc", conformance_probability(i["y"], i["u"], math.inf, tolerance))


def test_bounds_of_false_acceptance(case):
    """ILAC-G8:09/2019, Table 1 (partly from memory): one limit, estimate at the acceptance limit."""
    published = case("ilac_g8", "ilac-g8-table")
    tolerance = Tolerance(None, 10.0)
    risks = []
    for ratio in published.inputs["w_over_U"]:
        _, above = tails(10.0 - ratio * 2.0, 1.0, math.inf, tolerance)
        risks.append(above)
    published.holds("pfa", risks)


def test_grubbs_critical_values(case):
    """ISO 5725-2:1994, Table 5, one outlier (from memory)."""
    published = case("iso_5725_2", "iso5725-2-grubbs")
    i = published.inputs
    published.holds("G", [[grubbs_critical_value(alpha, p) for alpha in i["alpha"]] for p in i["p"]])


@pytest.mark.parametrize(
    ("number", "straggler", "outlier"),
    [(5, 0.0090, 0.0018), (8, 0.1101, 0.0563), (10, 0.1864, 0.1150), (12, 0.2537, 0.1738)],
)
def test_grubbs_critical_values_of_two_outliers(number, straggler, outlier):
    """ISO 5725-2:1994, Table 5, two outliers (from memory); simulated, so within 5 % of the table."""
    assert grubbs_pair_critical_values(number) == pytest.approx((straggler, outlier), rel=0.05)


def test_cochran_critical_values(case):
    """ISO 5725-2:1994, Table 4, found in the table of nmschembio.org.uk."""
    published = case("iso_5725_2", "cochran-95")
    i = published.inputs
    published.holds(
        "C",
        [[cochran_critical_value(i["alpha"], p, n - 1, (p - 1) * (n - 1)) for n in i["n"]] for p in i["p"]],
    )


def test_repeatability_of_sulfur_in_coal(case):
    """ISO 5725-2:1994, B.1 (from memory): unequal numbers of replicates."""
    published = case("iso_5725_2", "iso5725-2-coal")
    deviations = []
    for level in published.inputs["levels"]:
        rows = tuple((lab, x) for lab, values in level["cells"].items() for x in values)
        evaluation = evaluate_study("repeatability", StudyData(("sample", "reading"), rows), study="coal")
        deviations.append(evaluation.estimate().standard_uncertainty)
    published.holds("sr", deviations)


def test_confidence_factors_of_a_standard_deviation(case):
    """Handbook tables (from memory): n results, 95 %."""
    published = case("standard_deviation_tables", "chi2-factors")
    factors = [standard_deviation_factors(n - 1) for n in published.inputs["n_list"]]
    published.holds("lower", [lower for lower, _ in factors])
    published.holds("upper", [upper for _, upper in factors])


def test_confidence_limits_of_the_gear_standard_deviation(case):
    """NIST/SEMATECH e-Handbook, 1.3.5.8 (from memory), the row of 95 %."""
    published = case("standard_deviation_tables", "nist-gear")
    i = published.inputs
    row = i["alpha"].index(0.05)
    lower, upper = standard_deviation_factors(i["n"] - 1)
    assert i["s"] * lower == pytest.approx(published.expected["lo"]["value"][row], abs=5e-6)
    assert i["s"] * upper == pytest.approx(published.expected["hi"]["value"][row], abs=5.1e-6)
    published.holds("crit", [float(chdtri(99, p)) for p in (0.975, 0.95, 0.05, 0.025)])
