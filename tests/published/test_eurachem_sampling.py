"""EURACHEM guide to uncertainty from sampling, example A1 (from memory)."""


def test_what_duplicate_analyses_tell(checked):
    assert checked(
        "eurachem_sampling", {"ufs-A1-classical": {"mean", "s_meas", "s_samp", "s_target", "s_total"}}
    )
