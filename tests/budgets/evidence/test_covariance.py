"""The design covariance, against numpy and against simulated truths."""

import json
import math

import numpy as np
import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.errors import EvidenceError, NotSupportedError
from budgets.evidence.evaluation import Estimate, Evaluation, MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix, covariance_of
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, combined

NOISE = np.array([[0.04, 0.018, -0.006], [0.018, 0.01, 0.0], [-0.006, 0.0, 0.02]])
OWN = np.array([[0.09, 0.02, 0.01], [0.02, 0.03, 0.0], [0.01, 0.0, 0.06]])
CHANNELS = ("protein", "moisture", "fat")
REFERENCES = np.array([0.05, 0.03, 0.04])


def replicates(samples=12, number=4, seed=1):
    generator = np.random.default_rng(seed)
    rows = []
    for sample in range(samples):
        true = generator.normal([25, 4, 26], [1, 0.5, 1])
        for k in range(number):
            rows.append((f"P{sample}", k, *map(float, generator.multivariate_normal(true, NOISE))))
    return StudyData(("sample", "scan", *CHANNELS), tuple(rows))


def pairs(number=80, readings=2, determinations=2, seed=2, own=OWN):
    generator = np.random.default_rng(seed)
    columns = ("pair", *CHANNELS, *(f"{name}_reference" for name in CHANNELS))
    rows = []
    for pair in range(number):
        true = generator.normal([25, 4, 26], [1, 0.5, 1])
        analyzer = true + np.array([0.1, -0.05, 0.0]) + generator.multivariate_normal([0, 0, 0], own)
        for k in range(max(readings, determinations)):
            scan = generator.multivariate_normal(analyzer, NOISE) if k < readings else [None] * 3
            wet = generator.normal(true, REFERENCES) if k < determinations else [None] * 3
            rows.append((f"V{pair}", *(None if v is None else float(v) for v in (*scan, *wet))))
    return StudyData(columns, tuple(rows))


def evaluated(data, **options):
    return evaluate_study("covariance", data, study="wmp-scan", **options)


def scalar(name, u, nu=40, **changes):
    square = MeanSquare(f"lab/{name}", u * u, nu)
    members = {"value": None, "interval": None, "may_feed": ("reading",), "usable": True}
    return Estimate("repeatability", (Term(1.0, square),), **{**members, **changes})


def known_sources():
    joint = evaluated(replicates(30, 5)).estimate("repeatability_covariance")
    references = [
        NamedSource("reference_repeatability", scalar(name, float(u)), name)
        for name, u in zip(CHANNELS, REFERENCES, strict=True)
    ]
    return [NamedSource("analyzer_repeatability", joint), *references]


def test_replicates_give_the_pooled_covariance_of_numpy():
    data = replicates()
    evaluation = evaluated(data)
    groups = [np.array([row[2:] for row in data.rows if row[0] == f"P{i}"]) for i in range(12)]
    expected = sum(np.cov(group, rowvar=False) * 3 for group in groups) / 36
    joint = evaluation.estimate("repeatability_covariance")
    assert covariance_of(joint.matrix_terms) == pytest.approx(expected, rel=1e-10)
    assert joint.matrix_terms[0].mean_square.degrees_of_freedom == 36
    assert joint.may_feed == ("reading",)
    protein = evaluation.estimate("repeatability_protein")
    assert protein.variance == pytest.approx(expected[0, 0])
    assert protein.interval.lower < protein.standard_uncertainty < protein.interval.upper
    correlations = np.array(evaluation.diagnostics["repeatability_correlations"])
    assert correlations[0, 1] == pytest.approx(expected[0, 1] / math.sqrt(expected[0, 0] * expected[1, 1]))
    assert evaluation.warnings == ()
    assert (
        Evaluation.from_document(json.loads(json.dumps(evaluation.to_document()))).estimates
        == evaluation.estimates
    )


def test_a_large_common_offset_costs_no_digits():
    data = replicates()
    moved = StudyData(data.columns, tuple((*row[:2], *(x + 2.0**20 for x in row[2:])) for row in data.rows))
    first, second = (covariance_of(evaluated(d).estimates[0].matrix_terms) for d in (data, moved))
    assert second == pytest.approx(first, rel=1e-6)


def test_few_vectors_are_warned_of():
    assert [w.code for w in evaluated(replicates(3, 2)).warnings] == ["few-vectors"]
    (first, *_) = evaluated(pairs(8), options={"independent": True}).warnings
    assert first.code == "few-vectors"


def test_differences_give_the_whole_the_bias_and_what_is_left():
    data = pairs(400)
    evaluation = evaluated(data, options={"independent": True}, named_sources=known_sources())
    whole, bias, left = evaluation.estimates
    blocks = {}
    for row in data.rows:
        blocks.setdefault(row[0], []).append(row[1:])
    means = np.array([np.mean(block, axis=0) for block in blocks.values()])
    differences = means[:, :3] - means[:, 3:]
    expected = np.cov(differences, rowvar=False)
    assert covariance_of(whole.matrix_terms) == pytest.approx(expected, rel=1e-9)
    assert covariance_of(bias.matrix_terms) == pytest.approx(expected / 400, rel=1e-9)
    assert evaluation.diagnostics["biases"] == pytest.approx(differences.mean(axis=0))
    for percent, end in ((5, "lower"), (95, "upper")):
        bulk = evaluation.diagnostics[f"validated_range_{end}"]
        assert [bulk[name] for name in CHANNELS] == pytest.approx(
            np.percentile(means[:, 3:], percent, axis=0)
        )
    assert (whole.may_feed, bias.may_feed, whole.reading_weight) == (("lot",), ("calibration",), 0.5)
    # The simulated truth: the analyzer's own errors, within what 400 pairs can tell.
    assert left.usable
    assert left.taken_out == ("repeatability",)
    assert covariance_of(left.matrix_terms) == pytest.approx(OWN, abs=0.02)
    assert [w.code for w in evaluation.warnings] == ["pairs-taken-as-independent"]


def test_the_chain_from_scans_to_a_derived_characteristic():
    """Repeatability at the reading, remainder at the lot: what a new lot's error is, simulated."""
    sources = known_sources()
    evaluation = evaluated(pairs(400), options={"independent": True}, named_sources=sources)
    scan = Component.from_estimate("scan", "", None, sources[0].estimate, "A")
    rest = Component.from_estimate("rest", "", None, evaluation.estimate("remainder_covariance"), "A")
    names = {name: f"{name}_bias" for name in CHANNELS}
    bias = Component.from_estimate(
        "bias", "", None, evaluation.estimate("bias_covariance"), "A", quantities=names
    )
    given = zip(names.values(), evaluation.diagnostics["biases"], strict=True)
    quantities = [
        *(Quantity(n) for n in CHANNELS),
        *(Quantity(n, source="given", estimate=b) for n, b in given),
    ]
    expression = "(protein - protein_bias)/(100 - (moisture - moisture_bias) - (fat - fat_bias))*100"
    model = MeasurementModel(expression, tuple(quantities))
    once = Procedure(Count(1, 1, 3), Count(1, 2, 4))
    budget = Budget((scan, rest, bias), once, 0.95, None, "corrected", (0.0, 100.0), model)
    result = combined(budget, Counts((2,)), estimates={"protein": 25.1, "moisture": 3.95, "fat": 26.0})
    c = np.array([100 / 70, 100 * 25 / 70**2, 100 * 25 / 70**2])
    exact = c @ (OWN + NOISE / 2) @ c
    assert result.variance == pytest.approx(exact, rel=0.12)
    assert 100 < result.effective_degrees_of_freedom < 500


def test_scalars_can_stand_for_the_covariance_of_the_analyzer():
    sources = [
        NamedSource(source, scalar(f"{source}-{name}", u), name)
        for source, u in KNOWN.items()
        for name in CHANNELS
    ]
    evaluation = evaluated(pairs(60), options={"independent": True}, named_sources=sources)
    left = evaluation.estimate("remainder_covariance")
    assert left.taken_out == ("repeatability", "presentation")
    whole = covariance_of(evaluation.estimate("prediction_covariance").matrix_terms)
    expected = whole - np.eye(3) * (0.01 / 2 + 0.0009 / 2 + 0.0004)
    assert covariance_of(left.matrix_terms) == pytest.approx(expected)


def test_a_covariance_in_another_order_is_taken_out_rightly():
    sources = known_sources()
    (term,) = sources[0].estimate.matrix_terms
    array = np.asarray(term.mean_square.value)[::-1, ::-1]
    turned = MeanSquareMatrix("turned", CHANNELS[::-1], tuple(map(tuple, array.tolist())), 30)
    estimate = Estimate("x", (), None, None, ("reading",), True, matrix_terms=(MatrixTerm(1.0, turned),))
    options = {"independent": True}
    straight = evaluated(pairs(60), options=options, named_sources=sources)
    other = evaluated(
        pairs(60), options=options, named_sources=[NamedSource(sources[0].source, estimate), *sources[1:]]
    )
    first, second = (
        covariance_of(e.estimate("remainder_covariance").matrix_terms) for e in (straight, other)
    )
    assert first == pytest.approx(second)


def test_what_is_not_significant_is_shown_and_not_usable():
    evaluation = evaluated(
        pairs(30, own=OWN * 1e-6), options={"independent": True}, named_sources=known_sources()
    )
    assert not evaluation.estimate("remainder_covariance").usable
    assert [w.code for w in evaluation.warnings] == [
        "pairs-taken-as-independent",
        "remainder-not-significant",
    ]
    assert "remainder_matrix" in evaluation.diagnostics


def test_without_sources_the_whole_is_all_there_is():
    evaluation = evaluated(pairs(30), options={"independent": True})
    assert [e.name for e in evaluation.estimates] == ["prediction_covariance", "bias_covariance"]
    assert [w.code for w in evaluation.warnings] == ["pairs-taken-as-independent", "remainder-not-offered"]


KNOWN = {"analyzer_repeatability": 0.1, "reference_repeatability": 0.03, "presentation": 0.02}
RING_TEST = scalar("ring", 0.1, contains=("reproducibility",))
REPLICATES = (("a", 1.0, 2.0), ("a", 1.5, 2.5), ("b", 1.0, 1.0))


@pytest.mark.parametrize(
    ("columns", "rows", "options", "where"),
    [
        (("protein", "fat"), ((1.0, 2.0),), {}, ("columns",)),
        (("sample", "pair", "a", "b"), (("1", "1", 1.0, 2.0),), {}, ("columns",)),
        (("sample", "protein"), (("1", 1.0),), {}, ("columns",)),
        (("sample", "x", "y", "x_reference"), (("1", 1.0, 2.0, 3.0),), {}, ("columns",)),
        (("sample", "x", "y"), (("1", 1.0, 2.0), ("1", 1.0, None)), {}, ("rows", 1)),
        (("sample", "x", "y"), (("1", 1.0, 2.0), ("2", 1.0, 2.0)), {}, ("rows",)),
        (("sample", "x", "y"), (("1", 1.0, 2.0), ("1", 1.0, 3.0)), {}, ("rows",)),
        (("sample", "x", "y"), REPLICATES, {"options": {"independent": True}}, ("named_sources",)),
        (("pair", "x", "y"), REPLICATES, {}, ("options", "independent")),
        (("pair", "x", "y"), REPLICATES, {"options": {"independent": True}}, ("columns",)),
        (
            ("pair", "x", "y", "x_reference", "y_reference", "z_reference"),
            (("1", 1.0, 2.0, 1.0, 2.0, 1.0),),
            {"options": {"independent": True}},
            ("columns",),
        ),
        (
            ("pair", "x", "y", "x_reference", "y_reference"),
            (("1", 1.0, 2.0, None, 2.0), ("2", 1.0, 2.0, 1.0, 2.0)),
            {"options": {"independent": True}},
            ("rows", 0),
        ),
        (
            ("pair", "x", "y", "x_reference", "y_reference"),
            (("1", 1.0, 2.0, 1.0, 2.0), ("1", 1.0, None, 1.0, 2.0)),
            {"options": {"independent": True}},
            ("rows", 0),
        ),
    ],
)
def test_data_that_do_not_serve_are_refused(columns, rows, options, where):
    with pytest.raises(EvidenceError) as caught:
        evaluated(StudyData(columns, rows), **options)
    assert caught.value.each()[0].where == where


@pytest.mark.parametrize(
    ("change", "kind"),
    [
        (lambda s: [NamedSource("reference_run", scalar("r", 0.1), "fat")], NotSupportedError),
        (lambda s: [NamedSource("presentation", scalar("r", 0.1))], EvidenceError),
        (lambda s: [NamedSource("presentation", scalar("r", 0.1, usable=False), "fat")], EvidenceError),
        (lambda s: [NamedSource("presentation", scalar("r", 0.0), "fat")], EvidenceError),
        (lambda s: [NamedSource("presentation", RING_TEST, "fat")], EvidenceError),
        (lambda s: [NamedSource("subsampling", s[0].estimate)], EvidenceError),
        (lambda s: [s[0], s[0]], EvidenceError),
    ],
)  # fmt: skip
def test_sources_that_cannot_be_taken_out_are_refused(change, kind):
    with pytest.raises(kind) as caught:
        evaluated(pairs(30), options={"independent": True}, named_sources=change(known_sources()))
    assert caught.value.each()[0].where[0] == "named_sources"


def test_a_covariance_of_other_quantities_is_not_taken_out():
    narrow = MeanSquareMatrix("n", CHANNELS[:2], ((1.0, 0.0), (0.0, 1.0)), 9)
    estimate = Estimate("x", (), None, None, ("reading",), True, matrix_terms=(MatrixTerm(1.0, narrow),))
    with pytest.raises(EvidenceError, match="names the quantity"):
        evaluated(
            pairs(30), options={"independent": True}, named_sources=[NamedSource("presentation", estimate)]
        )


# --- pairs in groups -----------------------------------------------------------------------------------


def grouped_pairs(sizes, between, seed=5):
    """Draw pairs read once, in groups of these sizes that share an error of the analyzer."""
    generator = np.random.default_rng(seed)
    columns = ("pair", "group", *CHANNELS, *(f"{name}_reference" for name in CHANNELS))
    rows = []
    for group, size in enumerate(sizes):
        shared = generator.normal(0, between, 3)
        for pair in range(size):
            true = generator.normal([25, 4, 26], [1, 0.5, 1])
            scan = true + shared + generator.multivariate_normal([0, 0, 0], OWN)
            wet = generator.normal(true, REFERENCES)
            rows.append((f"V{group}-{pair}", f"day-{group}", *map(float, (*scan, *wet))))
    return StudyData(columns, tuple(rows))


def single(data, channel):
    """Evaluate the same pairs as an agreement study of one channel."""
    place = CHANNELS.index(channel)
    rows = tuple((row[0], row[1], row[2 + place], row[5 + place]) for row in data.rows)
    table = StudyData(("pair", "group", "reading", "reference"), rows)
    return evaluate_study("agreement", table, study="one", options={"independent": True})


@pytest.mark.parametrize("sizes", [[5] * 12, [3, 9, 4, 8, 2, 7, 6, 5]])
def test_biases_of_pairs_in_groups_are_as_well_known_as_each_by_itself(sizes):
    data = grouped_pairs(sizes, between=0.5)
    evaluation = evaluated(data, options={"independent": True})
    bias = evaluation.estimate("bias_covariance")
    matrix = covariance_of(bias.matrix_terms)
    assert bias.matrix_terms[0].mean_square.degrees_of_freedom == len(sizes) - 1
    for place, channel in enumerate(CHANNELS):
        alone = single(data, channel).estimate("bias").variance
        assert matrix[place, place] == pytest.approx(alone, rel=1e-9)
    assert "pairs-taken-as-independent" not in [warning.code for warning in evaluation.warnings]


@pytest.mark.parametrize(("sizes", "seed"), [([60], 5), ([1] * 60, 5), ([15] * 4, 0)])
def test_groups_that_say_nothing_leave_the_covariance_of_the_mean(sizes, seed):
    data = grouped_pairs(sizes, between=0.0, seed=seed)
    bias = evaluated(data, options={"independent": True}).estimate("bias_covariance")
    (term,) = bias.matrix_terms
    assert term.coefficient == pytest.approx(1 / 60)
    assert term.mean_square.degrees_of_freedom == 59


@pytest.mark.parametrize("seed", range(6))
def test_few_groups_know_the_biases_as_few_groups_know_them(seed):
    """With degrees of freedom of the groups wherever one channel by itself has them."""
    data = grouped_pairs([10, 10], between=0.05, seed=seed)
    (term, *_) = evaluated(data, options={"independent": True}).estimate("bias_covariance").matrix_terms
    alone = [single(data, channel).estimate("bias") for channel in CHANNELS]
    known = [estimate.degrees_of_freedom < 2 for estimate in alone]
    assert term.mean_square.degrees_of_freedom == (1 if any(known) else 19)
    if "few" in term.mean_square.code:
        diagonal = np.diag(np.asarray(term.mean_square.value)) * term.coefficient
        assert diagonal == pytest.approx([estimate.variance for estimate in alone], rel=1e-9)


def test_one_pair_in_two_groups_is_refused():
    data = grouped_pairs([4, 4], between=0.1)
    twice = StudyData(data.columns, (*data.rows, (data.rows[0][0], "another", *data.rows[0][2:])))
    with pytest.raises(EvidenceError, match="two groups"):
        evaluated(twice, options={"independent": True})


def test_a_quantity_whose_differences_are_all_the_same_is_refused():
    columns = ("pair", "x", "y", "x_reference", "y_reference")
    noise = np.random.default_rng(4).normal(0, 0.1, 20)
    rows = tuple(
        (f"V{i}", 3 + i / 10, 5.0 + float(noise[i]), float(f"{3.1 + i / 10:.1f}"), 5.0) for i in range(20)
    )
    with pytest.raises(EvidenceError, match="the values of x do not scatter"):
        evaluated(StudyData(columns, rows), options={"independent": True})
