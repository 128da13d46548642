import math
from decimal import ROUND_HALF_EVEN, Decimal

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from budgets.errors import LimitsError
from budgets.rounded_comparison import rounded_tolerance


def rounded(x, decimals):
    return Decimal(repr(x)).quantize(Decimal(1).scaleb(-decimals), ROUND_HALF_EVEN)


@st.composite
def cases(draw):
    """Draw a limit with its decimals, and a double at, next to, or some units around half a unit from it."""
    decimals = draw(st.integers(0, 6))
    limit = Decimal(draw(st.integers(-(10**7), 10**7))).scaleb(-decimals)
    tie = limit + draw(st.sampled_from([-1, 1, -3, 3])) * Decimal("0.5").scaleb(-decimals)
    x = float(tie)
    for _ in range(draw(st.integers(0, 2))):
        x = math.nextafter(x, draw(st.sampled_from([-math.inf, math.inf])))
    near = draw(st.sampled_from([x, float(limit), float(limit) + draw(st.floats(-2, 2)) * 10.0**-decimals]))
    return float(limit), decimals, near


@given(cases(), st.booleans())
# From the project's rules: 3.25 goes to 3.2 and 3.35 to 3.4.
@example((3.2, 1, 3.25), True)
@example((3.3, 1, 3.35), True)
@example((3.3, 1, 3.25), False)
@example((0.0, 1, -0.05), True)
def test_the_effective_limits_compare_as_the_rounded_decimals_do(case, inclusive):
    limit, decimals, x = case
    stated, shown = Decimal(repr(limit)), rounded(x, decimals)
    upper = rounded_tolerance(None, limit, decimals=decimals, upper_inclusive=inclusive)
    assert upper.holds(x) == (shown <= stated if inclusive else shown < stated)
    lower = rounded_tolerance(limit, None, decimals=decimals, lower_inclusive=inclusive)
    assert lower.holds(x) == (shown >= stated if inclusive else shown > stated)
    assert (upper.stated_ends, lower.stated_ends) == ((None, limit), (limit, None))


def test_the_rounding_method_of_the_standard():
    # ASTM E29, rounding method (from memory): 3.25 rounds to 3.2, 3.35 to 3.4; half to even.
    at_most = rounded_tolerance(None, 3.2, decimals=1)
    assert (at_most.upper, at_most.upper_inclusive) == (3.25, True)
    odd = rounded_tolerance(None, 3.3, decimals=1)
    assert (odd.upper, odd.upper_inclusive) == (3.35, False)
    strict = rounded_tolerance(None, 3.3, decimals=1, upper_inclusive=False)
    assert (strict.upper, strict.upper_inclusive) == (3.25, True)


@pytest.mark.parametrize(
    ("limits", "options", "words"),
    [
        ((None, 3.25), {"decimals": 1}, "more decimals than the 1"),
        ((None, math.inf), {"decimals": 1}, "finite"),
        ((123456789012345.0, None), {"decimals": 3}, "too many digits"),
        (
            (3.1, 3.2),
            {"decimals": 1, "lower_inclusive": False, "upper_inclusive": False},
            "no number with 1 decimals",
        ),
        ((None, None), {"decimals": 1}, "no tolerance limit"),
    ],
)
def test_limits_that_cannot_be_compared_rounded(limits, options, words):
    with pytest.raises(LimitsError, match=words):
        rounded_tolerance(*limits, **options)


def test_two_limits_one_unit_apart_leave_both_of_them():
    tolerance = rounded_tolerance(3.1, 3.2, decimals=1)
    assert tolerance.holds(3.1)
    assert tolerance.holds(3.2)
    assert not tolerance.holds(3.0499999)
