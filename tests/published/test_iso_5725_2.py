"""ISO 5725-2:1994, B.1 and Tables 4 and 5 (from memory; Table 4 found)."""

import pytest

from budgets.evidence.screening import grubbs_pair_critical_values


def test_precision_and_critical_values(checked):
    assert checked("iso_5725_2")


@pytest.mark.parametrize(
    ("number", "straggler", "outlier"),
    [(5, 0.0090, 0.0018), (8, 0.1101, 0.0563), (10, 0.1864, 0.1150), (12, 0.2537, 0.1738)],
)
def test_grubbs_critical_values_of_two_outliers(number, straggler, outlier):
    """Table 5, two outliers (from memory); simulated, so within 5 % of the table."""
    assert grubbs_pair_critical_values(number) == pytest.approx((straggler, outlier), rel=0.05)
