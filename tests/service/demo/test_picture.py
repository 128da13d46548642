"""The number line in text: where the brackets, the guard band and the estimate stand."""

from service.demo.picture import WIDTH, number_line


def verdict(**changes: object) -> dict[str, object]:
    return {
        "estimate": 3.1,
        "expanded_uncertainty": 0.2,
        "lower_tolerance_limit": None,
        "upper_tolerance_limit": 3.2,
        "lower_acceptance_limit": None,
        "upper_acceptance_limit": 3.0,
        "unit": "%",
    } | changes


def test_an_upper_limit_reads_acceptance_then_guard_band_then_outside() -> None:
    _, line, weight, _ = number_line(verdict())
    bracket = line.index("]")
    assert set(line[:bracket]) == {"─"}
    assert set(line[bracket + 1 :]) == {"/", ":"}
    assert line.index(":") > line.index("/")
    # The estimate hangs below the guard band: this lot is on hold.
    assert line[weight.index("●")] == "/"


def test_two_limits_stand_between_two_brackets() -> None:
    _, line, weight, _ = number_line(
        verdict(estimate=2.5, lower_tolerance_limit=2.0, lower_acceptance_limit=2.2)
    )
    assert line.index("[") < weight.index("●") < line.index("]")
    assert line[0] == ":"
    assert len(line) == WIDTH


def test_the_coverage_interval_lies_above_the_estimate() -> None:
    bar, _, weight, _ = number_line(verdict())
    assert bar.index("├") < weight.index("●") < bar.index("┤")
    assert bar.index("┬") == weight.index("●")
