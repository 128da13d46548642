"""Global risks against double integrals by mpmath, a simulated plant of a million lots, and their laws."""

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from mpmath import mp
from scipy import stats

from budgets.conformity import Tolerance
from budgets.errors import LimitsError
from budgets.global_risks import global_risks, mean_consumers_risk, nonconforming_share, risks_of_acceptance
from budgets.level_dependence import LevelDependence
from budgets.measurement_errors import MeasurementErrors
from budgets.prior_estimates import prior_of_reference_values
from budgets.production_laws import Production
from budgets.production_priors import ProductionPrior, Steering

BOTH, UPPER, LOWER = Tolerance(2.7, 3.2), Tolerance(None, 3.2), Tolerance(2.7, None)
TOLERANCES = pytest.mark.parametrize("tolerance", [BOTH, UPPER, LOWER], ids=["both", "upper", "lower"])


def density(prior, x):
    """Return the density of a prior with the digits of mpmath."""
    mean, deviation = mp.mpf(prior.mean), mp.mpf(prior.standard_deviation)
    if prior.distribution == "normal":
        return mp.npdf(x, mean, deviation)
    nu = mp.mpf(prior.degrees_of_freedom)
    scale = deviation * mp.sqrt((nu - 2) / nu)
    z = (x - mean) / scale
    constant = mp.gamma((nu + 1) / 2) / (mp.sqrt(nu * mp.pi) * mp.gamma(nu / 2))
    return constant * (1 + z * z / nu) ** (-(nu + 1) / 2) / scale


def below(z, nu):
    if math.isinf(nu):
        return mp.ncdf(z)
    tail = mp.betainc(mp.mpf(nu) / 2, 0.5, 0, nu / (nu + z * z), regularized=True) / 2
    return tail if z < 0 else 1 - tail


def probability_between(z_lower, z_upper, nu):
    return below(z_upper, nu) - below(z_lower, nu)


def quadrature(function, *edges):
    # Each piece is smooth: 24 nodes are far more than it needs, and mpmath's own choice takes minutes.
    return mp.quad(function, *edges, method="gauss-legendre", maxdegree=4)


def pieces(*places):
    return sorted({mp.mpf(place) for place in places})


def exact(prior, u, nu, tolerance, lower, upper, *, both=True):
    """Return consumer's and producer's risk: truth outside, and inside, in one integral over the truth."""
    low = -mp.inf if lower is None else mp.mpf(lower)
    high = mp.inf if upper is None else mp.mpf(upper)
    t_low = -mp.inf if tolerance.lower is None else mp.mpf(tolerance.lower)
    t_high = mp.inf if tolerance.upper is None else mp.mpf(tolerance.upper)

    def accepted(x):
        return probability_between((low - x) / u, (high - x) / u, nu)

    s = prior.standard_deviation
    reach = 14 if prior.distribution == "normal" else 3000
    edges = [prior.mean + k * s for k in (-reach, -300, -60, -14, -6, -2, 0, 2, 6, 14, 60, 300, reach)]
    edges += [limit + k * u for limit in (lower, upper) if limit for k in (-8, -3, 0, 3, 8)]

    def over(a, b, of):
        inner = [a, b, *(edge for edge in edges if a < edge < b)]
        finite = [x for x in pieces(*inner) if abs(x - prior.mean) <= reach * s]
        return quadrature(lambda x: density(prior, x) * of(x), finite) if len(finite) > 1 else mp.mpf(0)

    # The last piece on either side ends with the reach of the prior.
    start, end = prior.mean - reach * s, prior.mean + reach * s
    consumers = over(max(t_high, start), end, accepted) if t_high < mp.inf else mp.mpf(0)
    consumers += over(start, min(t_low, end), accepted) if t_low > -mp.inf else 0
    if not both:
        return consumers, None
    producers = over(max(t_low, start), min(t_high, end), lambda x: 1 - accepted(x))
    return consumers, producers


CASES = [
    (ProductionPrior("normal", 3.0, 0.08), 0.05, math.inf),
    (ProductionPrior("normal", 3.1, 0.02), 0.05, math.inf),
    (ProductionPrior("normal", 3.0, 0.3), 0.004, math.inf),
    (ProductionPrior("normal", 2.95, 0.06), 0.05, 7.5),
    (ProductionPrior("t", 3.0, 0.08, 5.0), 0.05, math.inf),
    (ProductionPrior("t", 2.9, 0.08, 12.0), 0.04, 9.0),
]


@TOLERANCES
@pytest.mark.parametrize(("prior", "u", "nu"), CASES)
def test_risks_agree_with_mpmath(prior, u, nu, tolerance):
    """Issue 5: absolute 1e-10, relative 1e-8 down to 1e-12."""
    with mp.workdps(18):
        for band in (0.0, 2.5 * u):
            found = global_risks(prior, MeasurementErrors.of(u, 0.0, nu), tolerance, band)
            lower = None if tolerance.lower is None else tolerance.lower + band
            upper = None if tolerance.upper is None else tolerance.upper - band
            consumers, producers = exact(prior, u, nu, tolerance, lower, upper)
            for value, right in (
                (found.global_consumers_risk[0], consumers),
                (found.global_producers_risk[0], producers),
            ):
                assert abs(value - right) < 1e-10
                if right > 1e-12:
                    assert abs(value - right) < 1e-8 * right


def test_a_true_double_integral_over_truth_and_reading():
    """Without any distribution function: the joint density itself, beyond T and below A."""
    s, u, limit, accepted = mp.mpf("0.08"), mp.mpf("0.05"), mp.mpf("3.2"), mp.mpf("3.12")
    with mp.workdps(20):
        found = quadrature(
            lambda x, y: mp.npdf(x, 3, s) * mp.npdf(y, x, u),
            [limit, limit + mp.mpf("0.1"), limit + mp.mpf("0.4")],
            [accepted - mp.mpf("0.5"), accepted - mp.mpf("0.1"), accepted],
        )
    prior = ProductionPrior("normal", 3.0, 0.08)
    risk, _ = mean_consumers_risk(prior, MeasurementErrors.of(0.05), UPPER, None, 3.12)
    assert risk == pytest.approx(float(found), rel=1e-9)


def test_far_out_in_the_tail_the_digits_stay():
    prior, errors = ProductionPrior("normal", 2.9, 0.05), MeasurementErrors.of(0.04)
    for band in (0.02, 0.06, 0.1):
        with mp.workdps(20):
            right, _ = exact(prior, 0.04, math.inf, UPPER, None, 3.2 - band, both=False)
        value = global_risks(prior, errors, UPPER, band).global_consumers_risk[0]
        assert 1e-13 < right < 1e-9
        assert abs(value - right) < 1e-8 * right


@TOLERANCES
def test_the_mean_over_the_common_error_of_readings_that_were_seen(tolerance):
    """The readings stay where they were seen, the truth behind them moves: a double integral over both."""
    prior = ProductionPrior("normal", 3.0, 0.08, anchor="readings")
    errors = MeasurementErrors.of(0.04, 0.03)
    band = 0.05
    lower = None if tolerance.lower is None else tolerance.lower + band
    upper = None if tolerance.upper is None else tolerance.upper - band
    found = risks_of_acceptance(prior, errors, tolerance, lower, upper)

    def given(e):
        moved = Tolerance(
            None if tolerance.lower is None else float(tolerance.lower + e),
            None if tolerance.upper is None else float(tolerance.upper + e),
        )
        return exact(ProductionPrior("normal", 3.0, 0.08), 0.04, math.inf, moved, lower, upper, both=False)[0]

    places, weights = np.polynomial.hermite_e.hermegauss(16)
    with mp.workdps(16):
        mean = sum(
            float(given(0.03 * z)) * w for z, w in zip(places, weights, strict=True) if w > 1e-12
        ) / math.sqrt(2 * math.pi)
    assert found.global_consumers_risk[0] == pytest.approx(mean, rel=1e-8)
    # Rule 49: the readings' distribution is what was observed, u is not added again.
    seen = stats.norm(3.0, math.hypot(0.08, 0.04))
    rate = (1 if upper is None else seen.cdf(upper)) - (0 if lower is None else seen.cdf(lower))
    assert found.release_rate[0] == pytest.approx(rate, rel=1e-12)


@pytest.mark.parametrize("anchor", ["true_values", "readings"])
@TOLERANCES
def test_one_plant_in_twenty_has_a_risk_above_the_quantile(tolerance, anchor):
    """By its definition: the probability of the common errors at which the risk is larger is 5 %."""
    prior = ProductionPrior("normal", 3.0, 0.08, anchor=anchor)
    for nu in (math.inf, 6.0):
        errors = MeasurementErrors.of(0.04, 0.03, nu)
        found = global_risks(prior, errors, tolerance, [0.0, 0.06])
        production = Production(prior, errors, tolerance)
        rows = production.rows(found.lower_acceptance_limit, found.upper_acceptance_limit)
        distribution = stats.t(nu, scale=0.03) if nu < math.inf else stats.norm(0, 0.03)
        plants = np.linspace(-0.2, 0.2, 401)
        each = [production.given(rows, e) for e in plants.tolist()]
        for name, quantiles in (
            ("nonconforming_accepted", found.global_consumers_risk_quantile),
            ("conforming_not_accepted", found.global_producers_risk_quantile),
        ):
            risks = np.log([getattr(rates, name) for rates in each])
            for excess in (risks - np.log(quantiles)).T:
                change = np.flatnonzero(excess[1:] * excess[:-1] < 0)
                step = plants[1] - plants[0]
                crossings = plants[change] - step * excess[change] / (excess[change + 1] - excess[change])
                ends = np.concatenate(([0.0], distribution.cdf(crossings), [1.0]))
                above = np.diff(ends)[(0 if excess[0] > 0 else 1) :: 2].sum()
                assert above == pytest.approx(0.05, rel=2e-3)


def test_without_a_common_error_there_is_one_plant_only():
    found = global_risks(ProductionPrior("normal", 3.0, 0.08), MeasurementErrors.of(0.05), BOTH, [0.0, 0.05])
    np.testing.assert_array_equal(found.global_consumers_risk, found.global_consumers_risk_quantile)
    np.testing.assert_array_equal(found.global_producers_risk, found.global_producers_risk_quantile)


PRIORS = [
    ProductionPrior("normal", 3.0, 0.08),
    ProductionPrior("normal", 3.0, 0.08, anchor="readings"),
    ProductionPrior("normal", 3.0, 0.08, steering=Steering(3.0, 0.05, -0.6)),
    ProductionPrior("normal", 3.0, 0.08, steering=Steering(3.0, 0.05, 0.0)),
]


@TOLERANCES
@pytest.mark.parametrize("prior", PRIORS, ids=["truth", "readings", "steered", "unrelated"])
def test_a_curve_is_made_of_its_points(prior, tolerance):
    """Strips between nested intervals give what each interval gives alone; also over a wide step."""
    errors = MeasurementErrors.of(0.04, 0.03)
    for bands in (np.linspace(0, 0.2, 60), np.array([0.0, 0.0, 0.001, 0.24])):
        curve = global_risks(prior, errors, tolerance, bands)
        for i in range(0, bands.size, 7):
            one = global_risks(prior, errors, tolerance, bands[i])
            for name in ("global_consumers_risk", "global_producers_risk", "release_rate"):
                assert getattr(curve, name)[i] == pytest.approx(getattr(one, name)[0], rel=1e-11)


def test_a_curve_of_t_is_made_of_its_points_too():
    errors = MeasurementErrors.of(0.04, 0.03, 8.0)
    curve = global_risks(ProductionPrior("t", 3.0, 0.08, 6.0), errors, UPPER, np.linspace(0, 0.1, 20))
    one = global_risks(ProductionPrior("t", 3.0, 0.08, 6.0), errors, UPPER, curve.guard_band[7])
    assert curve.global_consumers_risk[7] == one.global_consumers_risk[0]


def test_shares_are_risks_over_rates():
    found = global_risks(ProductionPrior("normal", 3.0, 0.1), MeasurementErrors.of(0.05), UPPER, [0.0, 0.1])
    np.testing.assert_allclose(
        found.conditional_global_consumers_risk * found.release_rate, found.global_consumers_risk
    )
    np.testing.assert_allclose(
        found.conditional_global_producers_risk * (1 - found.release_rate), found.global_producers_risk
    )
    assert found.nonconforming_share == pytest.approx(float(mp.ncdf(-2)), rel=1e-12)
    nowhere = global_risks(ProductionPrior("normal", 9.0, 0.1), MeasurementErrors.of(0.05), UPPER, [0.0])
    assert nowhere.release_rate[0] == 0 and np.isnan(nowhere.conditional_global_consumers_risk[0])
    assert nowhere.conditional_global_producers_risk[0] == 0


@pytest.mark.parametrize("tolerance", [BOTH, UPPER, LOWER])
def test_the_share_of_nonconforming_lots_is_what_the_prior_says(tolerance):
    prior, errors = ProductionPrior("t", 3.0, 0.1, 6.0), MeasurementErrors.of(0.05, 0.04)
    known = stats.t(6.0, 3.0, 0.1 * math.sqrt(4 / 6))
    right = 0.0 if tolerance.lower is None else known.cdf(tolerance.lower)
    right += 0.0 if tolerance.upper is None else known.sf(tolerance.upper)
    assert nonconforming_share(prior, errors, tolerance) == pytest.approx(right, rel=1e-10)


def test_an_uncertainty_that_grows_with_the_value():
    prior = ProductionPrior("normal", 3.0, 0.08)
    errors = MeasurementErrors(LevelDependence(0.03, 0.01), LevelDependence(0.0, 0.0))
    risk, rate = mean_consumers_risk(prior, errors, UPPER, None, 3.1)
    with mp.workdps(20):

        def accepted(x):
            return mp.ncdf((mp.mpf(3.1) - x) / mp.sqrt(mp.mpf(0.03) ** 2 + (mp.mpf(0.01) * x) ** 2))

        edges = [3.2, 3.3, 3.4, 3.6, 3.9]
        right = mp.quad(lambda x: density(prior, x) * accepted(x), edges)
        whole = mp.quad(lambda x: density(prior, x) * accepted(x), [2.1, 2.7, 2.9, 3.0, 3.1, *edges])
    assert risk == pytest.approx(float(right), rel=1e-9)
    assert rate == pytest.approx(float(whole), rel=1e-9)


def test_an_uncorrected_bias_moves_the_readings():
    prior = ProductionPrior("normal", 3.0, 0.08)
    left = MeasurementErrors(LevelDependence(0.05, 0), LevelDependence(0.0, 0), math.inf, bias=-0.04)
    with_bias = global_risks(prior, left, UPPER, [0.02])
    assert with_bias.upper_acceptance_limit[0] == pytest.approx(3.2 - 0.04 - 0.02)
    risk, _ = mean_consumers_risk(prior, MeasurementErrors.of(0.05), UPPER, None, 3.2 - 0.02)
    assert with_bias.global_consumers_risk[0] == pytest.approx(risk, rel=1e-12)
    # Read below the truth by 0.04, seen at 2.96: the same plant, known from its readings.
    seen = ProductionPrior("normal", 2.96, 0.08, anchor="readings")
    assert global_risks(seen, left, UPPER, [0.02]).global_consumers_risk[0] == pytest.approx(risk, rel=1e-12)


LIMITED = st.floats(0.2, 3.0)


@settings(max_examples=25, deadline=None)
@given(st.floats(2.6, 3.3), LIMITED, LIMITED, st.sampled_from([math.inf, 5.5]), st.booleans())
def test_consumers_risk_falls_and_producers_rises_with_the_guard_band(mean, s, u, nu, two):
    prior = ProductionPrior("normal", mean, 0.05 * s)
    errors = MeasurementErrors.of(0.03 * u, 0.02, nu)
    found = global_risks(prior, errors, BOTH if two else UPPER, np.linspace(-0.1, 0.24, 9))
    # Neither beyond the rounding of sums.
    assert (np.diff(found.global_consumers_risk) <= 1e-15).all()
    assert (np.diff(found.global_producers_risk) >= -1e-15).all()
    assert (np.diff(found.release_rate) <= 1e-15).all()
    assert ((found.global_consumers_risk >= 0) & (found.release_rate <= 1)).all()


@settings(max_examples=20, deadline=None)
@given(st.floats(2.6, 3.3), LIMITED, LIMITED, st.floats(0, 0.2), st.sampled_from(["true_values", "readings"]))
def test_mirroring_changes_nothing(mean, s, u, band, anchor):
    errors = MeasurementErrors.of(0.03 * u, 0.02)
    there = global_risks(ProductionPrior("normal", mean, 0.05 * s, anchor=anchor), errors, UPPER, band)
    mirrored = ProductionPrior("normal", -mean, 0.05 * s, anchor=anchor)
    back = global_risks(mirrored, errors, Tolerance(-3.2, None), band)
    for name in ("global_consumers_risk", "global_producers_risk", "global_consumers_risk_quantile"):
        assert getattr(there, name)[0] == pytest.approx(getattr(back, name)[0], rel=1e-9, abs=1e-30)


@settings(max_examples=20, deadline=None)
@given(st.floats(2.6, 3.3), LIMITED, st.floats(0, 0.2), st.floats(1e-3, 1e3))
def test_another_unit_changes_nothing(mean, s, band, factor):
    assume(s > 0)
    here = global_risks(ProductionPrior("normal", mean, 0.05 * s), MeasurementErrors.of(0.03), BOTH, band)
    there = global_risks(
        ProductionPrior("normal", mean * factor, 0.05 * s * factor),
        MeasurementErrors.of(0.03 * factor),
        Tolerance(2.7 * factor, 3.2 * factor),
        band * factor,
    )
    assert here.global_consumers_risk[0] == pytest.approx(there.global_consumers_risk[0], rel=1e-8)


def test_a_perfect_measurement_takes_no_risk():
    found = global_risks(ProductionPrior("normal", 3.1, 0.1), MeasurementErrors.of(1e-9), BOTH, 0.0)
    assert found.global_consumers_risk[0] < 1e-8
    assert found.release_rate[0] == pytest.approx(1 - found.nonconforming_share, abs=1e-8)


def test_what_cannot_be_a_curve_is_refused():
    prior, errors = ProductionPrior("normal", 3.1, 0.1), MeasurementErrors.of(0.05)
    for bands in ([0.1, 0.0], [math.nan], [[0.0, 0.1]]):
        with pytest.raises(LimitsError, match="finite and ascend"):
            global_risks(prior, errors, BOTH, bands)
    with pytest.raises(LimitsError, match="leaves nothing between"):
        global_risks(prior, errors, BOTH, 0.3)


def test_acceptance_limits_of_a_rule_show_their_guard_band():
    prior, errors = ProductionPrior("normal", 3.0, 0.1), MeasurementErrors.of(0.05)
    assert risks_of_acceptance(prior, errors, UPPER, None, 3.1).guard_band[0] == pytest.approx(0.1)
    assert risks_of_acceptance(prior, errors, LOWER, 2.75, None).guard_band[0] == pytest.approx(0.05)


# --- simulated plants ----------------------------------------------------------------------------------

LOTS = 1_000_000


def within_four_standard_errors(share, probability):
    assert abs(share - probability) < 4 * math.sqrt(probability * (1 - probability) / LOTS)


def compare(truth, seen, lower, upper, found, place=0):
    conforming = (truth >= 2.7) & (truth <= 3.2)
    accepted = (seen >= lower) & (seen <= upper)
    within_four_standard_errors(np.mean(accepted), found.release_rate[place])
    within_four_standard_errors(np.mean(~conforming & accepted), found.global_consumers_risk[place])
    within_four_standard_errors(np.mean(conforming & ~accepted), found.global_producers_risk[place])
    within_four_standard_errors(np.mean(~conforming), found.nonconforming_share)


@pytest.mark.parametrize("shape", ["normal", "t"])
def test_a_simulated_plant_of_a_million_lots(shape):
    """Every lot of its own plant: the mean over the common error."""
    generator = np.random.default_rng(20260301)
    scale = 0.12 * math.sqrt(4 / 6)
    truth = 3.0 + (
        generator.normal(0, 0.12, LOTS) if shape == "normal" else scale * generator.standard_t(6, LOTS)
    )
    seen = truth + generator.normal(0, 0.05, LOTS) + generator.normal(0, 0.03, LOTS)
    prior = ProductionPrior(shape, 3.0, 0.12, math.inf if shape == "normal" else 6.0)
    found = global_risks(prior, MeasurementErrors.of(0.05, 0.03), BOTH, [0.0, 0.06])
    compare(truth, seen, 2.76, 3.14, found, place=1)


def test_one_simulated_plant_with_its_one_common_error():
    generator = np.random.default_rng(20260302)
    truth = generator.normal(3.0, 0.12, LOTS)
    seen = truth + generator.normal(0, 0.05, LOTS) - 0.04
    production = Production(ProductionPrior("normal", 3.0, 0.12), MeasurementErrors.of(0.05, 0.03), BOTH)
    rates = production.given(production.rows(2.76, 3.14), -0.04)
    conforming, accepted = (truth >= 2.7) & (truth <= 3.2), (seen >= 2.76) & (seen <= 3.14)
    within_four_standard_errors(np.mean(~conforming & accepted), rates.nonconforming_accepted[0])
    within_four_standard_errors(np.mean(conforming & ~accepted), rates.conforming_not_accepted[0])
    within_four_standard_errors(np.mean(accepted), rates.accepted[0])


def test_a_simulated_steered_plant_of_a_million_lots():
    """Each lot is set by a first reading with the analyzer's error of the day, and judged by a second one."""
    generator = np.random.default_rng(20260303)
    error = generator.normal(0, 0.11, LOTS)
    before = generator.normal(3.0, 0.06, LOTS)
    truth = before - 0.8 * (before + error + generator.normal(0, 0.03, LOTS) - 2.98)
    seen = truth + error + generator.normal(0, 0.03, LOTS)
    correlation = float(np.corrcoef(truth, seen)[0, 1])
    assert correlation < -0.2 and seen.std() < 0.6 * truth.std()
    # Known from reference values of the first tenth of the lots; another tenth of the error is theirs.
    tenth = slice(0, LOTS // 10)
    prior = prior_of_reference_values(truth[tenth], None, readings=seen[tenth]).prior
    found = global_risks(prior, MeasurementErrors.of(0.03), BOTH, 0.06)
    conforming, accepted = (truth >= 2.7) & (truth <= 3.2), (seen >= 2.76) & (seen <= 3.14)
    exact_law = ProductionPrior(
        "normal",
        float(truth.mean()),
        float(truth.std()),
        steering=Steering(float(seen.mean()), float(seen.std()), correlation),
    )
    predicted = global_risks(exact_law, MeasurementErrors.of(0.03), BOTH, 0.06)
    compare(truth, seen, 2.76, 3.14, predicted)
    for name, share in (
        ("global_consumers_risk", np.mean(~conforming & accepted)),
        ("release_rate", np.mean(accepted)),
    ):
        assert getattr(found, name)[0] == pytest.approx(float(share), rel=0.03)
    # The formula of independent errors would promise far less risk than there is.
    unsteered = ProductionPrior("normal", 2.98, float(seen.std()))
    blind = global_risks(unsteered, MeasurementErrors.of(0.03), BOTH, 0.06).global_consumers_risk[0]
    assert blind < 0.1 * np.mean(~conforming & accepted)


def test_an_empirical_prior_is_the_mean_of_its_normal_distributions():
    """Its risks are those of normal priors around every lot, each of which agrees with mpmath."""
    values = np.random.default_rng(9).gamma(6.0, 0.05, 40) + 2.7
    prior = ProductionPrior.empirical(values)
    width = (
        0.9
        * min(values.std(ddof=1), float(np.subtract(*np.quantile(values, [0.75, 0.25]))) / 1.34)
        * 40**-0.2
    )
    centres = values.mean() + (values - values.mean()) * math.sqrt(1 - (width / values.std(ddof=1)) ** 2)
    for nu in (math.inf, 7.0):
        errors = MeasurementErrors.of(0.04, 0.02, nu)
        whole = global_risks(prior, errors, BOTH, 0.03)
        each = [
            global_risks(ProductionPrior("normal", c, width), errors, BOTH, 0.03) for c in centres.tolist()
        ]
        for name in ("global_consumers_risk", "global_producers_risk", "release_rate"):
            mean = np.mean([getattr(one, name)[0] for one in each])
            assert getattr(whole, name)[0] == pytest.approx(mean, rel=1e-8)
