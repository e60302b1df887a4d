import numpy as np
from small_blocks import block, column, get, holds, params, rules_of, run_stage

from keelbook.stages import shares

NAN = np.nan


def test_means_by_hand():
    share = [0.6, 0.62, 0.7, NAN, 0.64, 0.66, 0.68]
    book, findings = run_stage(
        shares.STAGE,
        params("shares", smoothing_years=3),
        block("labour_share/hours/_Z", {"industry=A": share}),
    )
    two = column(get(book, "labour_share_two_period/mean/_Z"), "industry=A")
    np.testing.assert_allclose(two, [NAN, 0.61, 0.66, NAN, NAN, 0.65, 0.67], rtol=1e-15)
    smoothed = column(get(book, "labour_share_smoothed/mean/_Z"), "industry=A")
    np.testing.assert_allclose(smoothed, [NAN, NAN, 0.64, NAN, NAN, NAN, 0.66], rtol=1e-14)
    assert [f["measure"] for f in findings] == ["capital_share"]
    assert rules_of(findings) == ["not_computed"]


def test_only_the_chosen_method_of_a_series_is_averaged():
    chosen = block("capital_share/hours/_Z", {"industry=A": [0.2, 0.4]})
    other = block("capital_share/unadjusted/_Z", {"industry=A": [0.9, 0.9]}, chosen=False)
    of_total = block("capital_share/sum_of_industries/_Z", {"industry=_T": [0.3, 0.5]})
    book, _ = run_stage(shares.STAGE, params("shares", smoothing_years=2), chosen, other, of_total)
    two = get(book, "capital_share_two_period/mean/_Z")
    np.testing.assert_allclose(column(two, "industry=A"), [NAN, 0.3])
    np.testing.assert_allclose(column(two, "industry=_T"), [NAN, 0.4])
    assert not holds(two, "industry=C")
    np.testing.assert_allclose(column(get(book, "capital_share_smoothed/mean/_Z"), "industry=A"), [NAN, 0.3])
