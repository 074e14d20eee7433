"""The bounds that the soak prints, against scipy; and that its bars are what it says they are."""

from __future__ import annotations

from collections import Counter

import pytest
from scipy.stats import beta

from tests.soak import bar_case, upper_bound
from tests.watch.records import RATES_HZ


@pytest.mark.parametrize(
    ("failed", "tried"), [(0, 1), (0, 30), (0, 10_000), (1, 30), (3, 1000), (17, 40), (2, 30_000)]
)
def test_the_bound_is_clopper_and_pearsons(failed: int, tried: int) -> None:
    assert upper_bound(failed, tried) == pytest.approx(beta.ppf(0.95, failed + 1, tried - failed), rel=1e-9)


def test_the_rule_of_three_holds_where_nothing_failed() -> None:
    assert upper_bound(0, 10_000) == pytest.approx(3.0 / 10_000, rel=2e-3)
    assert upper_bound(5, 5) == 1.0


def test_bars_come_in_equal_thirds_at_every_rate() -> None:
    cases = [bar_case(number) for number in range(3 * len(RATES_HZ) * 13)]
    strata = Counter(case.stratum for case in cases)
    assert strata["clean"] == strata["combined"] == len(cases) // 3
    assert len(strata) == 15 and len(set(strata.values())) == 2
    assert set(Counter(case.rate_hz for case in cases).values()) == {len(cases) // len(RATES_HZ)}
    assert min(case.peak_n / case.sigma_n for case in cases) < 150.0
