"""Thinning never hides an extreme; an update comes back as it was sent."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.stream.thin import thin_minmax
from daq.stream.updates import Update, decode, encode


@settings(deadline=None, max_examples=60)
@given(st.integers(5, 5000), st.integers(4, 400), st.integers(0, 2**32 - 1))
def test_extremes_order_and_bound_are_kept(count: int, rows_max: int, seed: int) -> None:
    table = np.column_stack(
        (np.arange(count, dtype=float), np.random.default_rng(seed).standard_normal(count))
    )
    thin = thin_minmax(table, 1, rows_max)
    assert len(thin) <= max(rows_max, 4)
    assert thin[:, 1].max() == table[:, 1].max() and thin[:, 1].min() == table[:, 1].min()
    assert (np.diff(thin[:, 0]) > 0).all()
    assert thin[0, 0] == 0.0 and thin[-1, 0] == count - 1


def test_a_hole_stays_visible() -> None:
    table = np.column_stack((np.arange(1000.0), np.ones(1000)))
    table[500, 1] = np.nan
    assert np.isnan(thin_minmax(table, 1, 40)[:, 1]).any()


def test_update_round_trip() -> None:
    columns = {"time_s": np.array([0.0, 1.0]), "net_n": np.array([np.nan, -1e300])}
    sent = Update(9, "trace", "f", "2026-01-01T00:00:00+00:00", True, {"run_id": "r"}, columns)
    got = decode(encode(sent))
    assert (got.number, got.kind, got.frame, got.simulated, got.body) == (
        9,
        "trace",
        "f",
        True,
        {"run_id": "r"},
    )
    for name, column in columns.items():
        np.testing.assert_array_equal(got.columns[name], column)


@pytest.mark.parametrize(
    "parts", [[], [b"a"], [b"trace", b"{}", b""], [b"trace", b'{"columns":["a"],"rows":2}', b"1234"]]
)
def test_other_bytes_are_refused(parts: list[bytes]) -> None:
    with pytest.raises((ValueError, KeyError)):
        decode(parts)
