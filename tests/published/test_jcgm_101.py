"""JCGM 101:2008, 9.2 to 9.4 (from memory): what the law of propagation gives; Monte Carlo is for later."""

MONTE_CARLO = {"y_mc", "u_mc", "lo_mc", "hi_mc"}


def test_what_the_law_of_propagation_gives(checked):
    assert checked(
        "jcgm_101",
        {
            "jcgm101-9.2.3": {"half"},
            "jcgm101-9.3": MONTE_CARLO,
            "jcgm101-9.4-x0.05-r0": MONTE_CARLO,
            "jcgm101-9.4-x0.01-r0.9": MONTE_CARLO,
        },
    )
