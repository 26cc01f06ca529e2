"""Chains of currency pairs: direct, inverse, crossed, missing."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.feed.rates import chains, worth

PAIRS = ("EURUSD", "USDJPY", "GBPEUR")


def one_day(pairs: dict[str, float], currencies: list[str], base: str = "EUR") -> dict[str, float]:
    rates, days = np.array([list(pairs.values())]), np.full((1, len(pairs)), 7)
    values, _ = worth(rates, days, tuple(pairs), currencies, base)
    return dict(zip(currencies, values[:, 0].tolist(), strict=True))


def test_direct_inverse_and_crossed():
    """One GBP costs 1.2 EUR; one EUR 1.25 USD; one USD 150 JPY, so that one JPY is 1 / 187.5 EUR."""
    found = one_day({"EURUSD": 1.25, "USDJPY": 150.0, "GBPEUR": 1.2}, ["EUR", "USD", "JPY", "GBP"])

    assert found == pytest.approx({"EUR": 1, "USD": 0.8, "JPY": 1 / 187.5, "GBP": 1.2})


def test_a_currency_without_a_chain_has_no_worth():
    found = one_day({"EURUSD": 1.25, "GBPCHF": 1.1}, ["CHF", "USD"])

    assert np.isnan(found["CHF"])
    assert found["USD"] == 0.8


def test_the_shortest_chain_counts_and_of_two_alike_the_first_by_name_whatever_the_order():
    pairs = {"USDJPY": 150.0, "EURUSD": 1.25, "EURJPY": 190.0}
    assert one_day(pairs, ["JPY"])["JPY"] == pytest.approx(1 / 190)

    both = {"USDEUR": 0.9, "EURUSD": 1.25}
    assert one_day(both, ["USD"]) == one_day(dict(reversed(both.items())), ["USD"])
    assert one_day(both, ["USD"])["USD"] == 0.8


def test_a_crossed_rate_is_as_old_as_the_oldest_of_its_chain():
    rates = np.array([[1.25, 150.0]])
    _, days = worth(rates, np.array([[9, 4]]), ("EURUSD", "USDJPY"), ["EUR", "JPY", "USD"], "EUR")

    assert days[1:, 0].tolist() == [4, 9]
    assert days[0, 0] > 10**6


@given(
    st.dictionaries(
        st.lists(st.sampled_from(("EUR", "USD", "JPY", "GBP", "CHF")), min_size=2, max_size=2, unique=True).map(
            "".join
        ),
        st.floats(1e-3, 1e3),
        max_size=8,
    )
)
def test_chains_lead_to_the_base_and_no_shorter_ones_exist(pairs):
    names = tuple(pairs)
    for currency, chain in chains(names, "EUR").items():
        at = currency
        for place, exponent in chain:
            quoted, priced = names[place][:3], names[place][3:]
            assert at == (quoted if exponent == 1 else priced)
            at = priced if exponent == 1 else quoted
        assert at == "EUR"
        assert len(chain) == distance(names, currency)


def distance(pairs: tuple[str, ...], currency: str) -> int:
    reached, steps = {"EUR"}, 0
    while currency not in reached:
        reached |= {code for pair in pairs for code in (pair[:3], pair[3:]) if {pair[:3], pair[3:]} & reached}
        steps += 1
    return steps
