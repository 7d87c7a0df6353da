"""Rounding to decimals and types, against exact decimal arithmetic (module decimal)."""

from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from procgen.ensemble.columns import Column, store
from procgen.ensemble.errors import EnsembleError

numbers = st.floats(-1e12, 1e12) | st.floats(allow_nan=False, allow_infinity=False)


@given(numbers, st.integers(0, 12))
def test_decimals_give_the_nearest_decimal_number_as_its_nearest_double(x, decimals):
    kept = float(store(np.array([[x]]), Column("x", decimals=decimals))[0, 0])
    unit = Decimal(10) ** -decimals
    nearest = Decimal(kept).quantize(unit) if abs(kept) < 1e15 else Decimal(kept)
    if abs(x) * 10.0**decimals < 2.0**52:
        assert kept == float(nearest)  # no digits beyond the asked ones
        slack = 1 + Decimal(2) ** -52 * (abs(Decimal(x)) / unit + 1)  # the product is rounded once
        assert abs(Decimal(x) - nearest) <= unit / 2 * slack
    else:
        assert kept == x


@given(st.floats(-1e15, 1e15), st.integers(1, 6))
def test_negative_decimals_give_multiples_of_powers_of_ten(x, digits):
    kept = float(store(np.array([[x]]), Column("x", decimals=-digits))[0, 0])
    assert kept % 10**digits == 0
    assert abs(Decimal(x) - Decimal(kept)) <= Decimal(10) ** digits / 2 * (1 + Decimal(2) ** -40)


def test_exact_halves_go_to_even_and_zero_has_no_sign():
    kept = store(np.array([[0.5, 1.5, 2.5, -0.5, -0.2]]), Column("x", decimals=0))
    assert kept.tolist() == [[0.0, 2.0, 2.0, 0.0, 0.0]]
    assert not np.signbit(kept).any()
    assert store(np.array([[-0.4, 2.5]]), Column("x", "int64")).tolist() == [[0, 2]]


def test_drawn_values_are_left_alone():
    values = np.array([[1.25, -0.0]])
    assert store(values, Column("x")) is values
    store(values, Column("x", "int64"))
    assert values.tolist() == [[1.25, -0.0]]


def test_types_and_what_does_not_fit_them():
    values = np.array([[1 / 3, 3e38]])
    assert store(values, Column("x", "float32")).dtype == np.float32
    assert store(np.array([[2.0**62]]), Column("x", "int64"))[0, 0] == 2**62
    with pytest.raises(EnsembleError, match="series x: the value 1e\\+39 does not fit type float32; use type"):
        store(np.array([[1e39]]), Column("x", "float32"))
    with pytest.raises(EnsembleError, match="does not fit type int64"):
        store(np.array([[2.0**63]]), Column("x", "int64"))
