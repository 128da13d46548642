"""JCGM 100:2008. Its figures are from memory unless the data file says where they were found."""

import math

import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.declarations import Declaration, evaluate
from budgets.evidence.evaluation import MeanSquare, Term, effective_degrees_of_freedom
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.evidence.sums import f_quantile
from budgets.propagation import Counts, combined, coverage_factor, expanded_uncertainty


def stated(meaning, value, **options):
    return evaluate(Declaration(meaning, value, **options), code="stated").estimate().standard_uncertainty


def test_type_a_evaluation_of_twenty_readings(case):
    """4.4.3, Table 1 (from memory)."""
    published = case("jcgm_100", "gum-4.4.3")
    readings = published.inputs["x"]
    data = StudyData(("sample", "reading"), tuple(("bath", x) for x in readings))
    evaluation = evaluate_study("repeatability", data, study="bath")
    s = evaluation.estimate("repeatability").standard_uncertainty
    published.holds("mean", evaluation.diagnostics["groups"][0]["mean"])
    published.holds("s", s)
    published.holds("u", s / math.sqrt(len(readings)))


def test_type_b_conversions(case):
    """4.3.4 to 4.3.8 and H.1.3 (from memory); the asymmetric rectangle is the half-width of its range."""
    published = case("jcgm_100", "gum-4.3")
    convert = {
        "multiple_of_sd": lambda i: stated("expanded", i["U"], coverage_factor=i["k"]),
        "normal_interval": lambda i: stated(
            "half_width", i["a"], distribution="normal", coverage_probability=i["p"]
        ),
        "rect": lambda i: stated("half_width", i["a"], distribution="rectangular"),
        "rect_asym": lambda i: stated(
            "half_width", (i["b_plus"] + i["b_minus"]) / 2, distribution="rectangular"
        ),
        "arcsine": lambda i: stated("half_width", i["a"], distribution="arcsine"),
    }
    for item in published.inputs["items"]:
        published.holds(item["name"], convert[item["dist"]](item))
    assert published.compared == set(published.expected)


def test_welch_satterthwaite_example(case):
    """G.4.1 (from memory): real-valued degrees of freedom, and the GUM's own rounding before truncation."""
    published = case("jcgm_100", "gum-G.4.1")
    terms = [
        Term(1.0, MeanSquare(f"x/{i}", u**2, nu))
        for i, (u, nu) in enumerate(zip(published.inputs["u"], published.inputs["nu"], strict=True))
    ]
    nu = effective_degrees_of_freedom(terms)
    uc = math.sqrt(sum(term.mean_square.value for term in terms))
    published.holds("uc", uc)
    published.holds("nu_eff", nu)
    published.holds("nu_trunc", math.floor(round(nu, 1)))
    published.holds("k", coverage_factor(published.inputs["p"], nu))
    published.holds("U", expanded_uncertainty(uc, published.inputs["p"], nu))


def test_table_of_t(case):
    """Table G.2; 68.27, 95.45 and 99.73 % stand for one, two and three standard deviations."""
    published = case("jcgm_100", "gum-G.2-t-table")
    sigmas = {68.27: 1, 95.45: 2, 99.73: 3}
    probabilities = [
        math.erf(sigmas[p] / math.sqrt(2)) if p in sigmas else p / 100 for p in published.inputs["p_percent"]
    ]
    freedoms = [math.inf if nu in ("inf", math.inf) else nu for nu in published.inputs["nu"]]
    published.holds("t", [[coverage_factor(p, nu) for p in probabilities] for nu in freedoms])


def test_expanded_uncertainty_with_nine_degrees_of_freedom(case):
    """7.2.4 (from memory)."""
    published = case("jcgm_100", "gum-7.2-expand")
    u, nu, p = (published.inputs[name] for name in ("u", "nu", "p"))
    published.holds("k", coverage_factor(p, nu))
    published.holds("U", expanded_uncertainty(u, p, nu))


def test_end_gauge_as_a_sum_of_contributions(case):
    """H.1 (from memory): components by declarations, contributions in nm, combined with G.2b."""
    published = case("jcgm_100", "gum-H.1")
    i = published.inputs
    alone = math.inf
    u_d1 = stated("expanded_with_probability", i["U_comp_random"], coverage_probability=0.95,
                  degrees_of_freedom=i["nu_comp"])  # fmt: skip
    u_dbar = i["s_repeat"] / math.sqrt(i["n_repeat"])
    u_d2 = i["U_comp_syst"] / 3
    u_ls = stated("expanded", i["U_std"], coverage_factor=i["k_std"])
    length = i["ls_nm"]
    u_dalpha = length * abs(i["theta"]) * stated("half_width", i["a_dalpha"], distribution="rectangular")
    u_dtheta = length * i["alpha"] * stated("half_width", i["a_dtheta"], distribution="rectangular")
    lines = [
        ("u_dbar", u_dbar, i["nu_repeat"]),
        ("u_d1", u_d1, i["nu_comp"]),
        ("u_d2", u_d2, i["nu_syst"]),
        ("u_ls", u_ls, i["nu_std"]),
        ("u_dalpha_term", u_dalpha, i["nu_dalpha"]),
        ("u_dtheta_term", u_dtheta, i["nu_dtheta"]),
    ]
    for name, value, _ in lines:
        published.holds(name, value)
    # The first three make up d, whose degrees of freedom are rounded in print before they are used.
    terms = [Term(1.0, MeanSquare(f"d/{name}", u**2, nu)) for name, u, nu in lines[:3]]
    published.holds("u_d", math.sqrt(sum(t.mean_square.value for t in terms)))
    published.holds("nu_d", effective_degrees_of_freedom(terms))
    once = Count(1, 1, 1)
    components = tuple(
        Component(name, "length", "lot", (Term(1.0, MeanSquare(f"gauge/{name}", u**2, nu or alone)),), "B")
        for name, u, nu in lines
    )
    budget = Budget(components, Procedure(once, once), 0.99, None, "corrected", (0.0, 1e9))
    result = combined(budget, Counts((1,)))
    published.holds("uc", result.standard_uncertainty)
    published.holds("uc2", result.variance)
    published.holds("nu_eff", result.effective_degrees_of_freedom)
    published.holds("nu_trunc", math.floor(result.effective_degrees_of_freedom))
    k = coverage_factor(0.99, math.floor(result.effective_degrees_of_freedom))
    published.holds("k99", k)
    published.holds("U99", k * result.standard_uncertainty)


def test_between_day_analysis_of_variance(case):
    """H.5 (from memory): five readings a day, rebuilt from the printed means and standard deviations."""
    published = case("jcgm_100", "gum-H.5")
    means, deviations = published.inputs["day_means_uV_offset"], published.inputs["day_sd_uV"]
    # Five values of mean 0 and standard deviation 1.
    pattern = (math.sqrt(2), -math.sqrt(2), 0.0, 0.0, 0.0)
    rows = tuple(
        (f"{day}.{k}", m + s * z, 0.0, f"day {day}")
        for day, (m, s) in enumerate(zip(means, deviations, strict=True))
        for k, z in enumerate(pattern)
    )
    data = StudyData(("pair", "reading", "reference", "group"), rows)
    evaluation = evaluate_study("agreement", data, study="zener", options={"independent": True})
    bias = evaluation.estimate("bias")
    published.holds("mean", published.inputs["offset_V"] + bias.value * 1e-6)
    between, within = (term.mean_square for term in bias.terms)
    assert (between.degrees_of_freedom, within.degrees_of_freedom) == (9, 40)
    published.holds("s_a", math.sqrt(between.value))
    published.holds("s_b", math.sqrt(within.value))
    published.holds("F", between.value / within.value)
    published.holds("F95", f_quantile(0.05, 9, 40))
    published.holds("F975", f_quantile(0.025, 9, 40))
    published.holds("s_B", math.sqrt((between.value - within.value) / 5))
    published.holds("u_mean", bias.standard_uncertainty)
    assert bias.degrees_of_freedom == pytest.approx(9)
    assert evaluation.diagnostics["bias_uncertainty_from"] == "group"
