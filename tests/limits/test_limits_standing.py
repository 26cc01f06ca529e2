"""Near, limit, limit_below and both: what a value's standing is, on which side, and how far."""

from __future__ import annotations

import math

import pytest
from drop_site import SmallSite, rule, rules
from hypothesis import given
from hypothesis import strategies as st

from monitor.words import Side, Standing


@pytest.fixture(scope="module")
def site(tmp_path_factory) -> SmallSite:
    """quay's net exposure is the quantity of ONE, whose close is 1 EUR."""
    site = SmallSite(tmp_path_factory.mktemp("standing") / "site")
    site.leave("instruments.csv", "instrument,currency,calendar\nONE,EUR,XDUB\n")
    site.prices({"ONE": (1.0,) * 5})
    return site


def standing_of(site: SmallSite, value: float, levels: str):
    site.positions(f"quay,ONE,{value!r}", "west,,", "east,,")
    site.settle(rules(rule("net", "{name: net}", levels, applies_to="{book: quay}")))
    return site.answers()["net", "book:quay"]


@pytest.mark.parametrize(
    ("levels", "value", "standing", "side", "distance"),
    [
        ("near: 90, limit: 100", 89.0, Standing.WITHIN, Side.ABOVE, -11),
        ("near: 90, limit: 100", 90.0, Standing.NEAR, Side.ABOVE, -10),
        ("near: 90, limit: 100", 100.0, Standing.NEAR, Side.ABOVE, 0),
        ("near: 90, limit: 100", 101.0, Standing.OVER, Side.ABOVE, 1),
        ("limit: 100", 100.0, Standing.WITHIN, Side.ABOVE, 0),
        ("limit: 0", 1e-300, Standing.OVER, Side.ABOVE, 1e-300),
        ("limit: -5", -4.0, Standing.OVER, Side.ABOVE, 1),
        ("near: 12, limit_below: 10", 13.0, Standing.WITHIN, Side.BELOW, -3),
        ("near: 12, limit_below: 10", 12.0, Standing.NEAR, Side.BELOW, -2),
        ("near: 12, limit_below: 10", 10.0, Standing.NEAR, Side.BELOW, 0),
        ("near: 12, limit_below: 10", 9.0, Standing.OVER, Side.BELOW, 1),
        ("near: 90, limit: 100, near_below: 60, limit_below: 50", 75.0, Standing.WITHIN, Side.ABOVE, -25),
        ("near: 90, limit: 100, near_below: 60, limit_below: 50", 74.0, Standing.WITHIN, Side.BELOW, -24),
        ("near: 90, limit: 100, near_below: 60, limit_below: 50", 60.0, Standing.NEAR, Side.BELOW, -10),
        ("near: 90, limit: 100, near_below: 60, limit_below: 50", 40.0, Standing.OVER, Side.BELOW, 10),
        ("near: 90, limit: 100, near_below: 60, limit_below: 50", 105.0, Standing.OVER, Side.ABOVE, 5),
        # Nearer to the lower limit, yet near the upper one: the side is that of the standing.
        ("near: 40, limit: 100, near_below: 2, limit_below: 1", 45.0, Standing.NEAR, Side.ABOVE, -55),
    ],
)
def test_the_standing_its_side_and_its_distance(site, levels, value, standing, side, distance):
    answer = standing_of(site, value, levels)

    assert (answer.standing, answer.side) == (standing, side)
    assert answer.value == value
    assert answer.distance == pytest.approx(distance, abs=0, rel=1e-12)


def test_the_level_that_counts_as_near_is_that_of_the_side(site):
    levels = "near: 90, limit: 100, near_below: 60, limit_below: 50"

    assert standing_of(site, 95.0, levels).near == 90
    assert standing_of(site, 55.0, levels).near == 60


@pytest.mark.parametrize(
    ("levels", "value", "utilisation"),
    [
        ("limit: 100", 25.0, 0.25),
        ("limit: 100", -25.0, None),
        ("limit: -100", 25.0, None),
        ("limit_below: 100", 400.0, 0.25),
        ("limit_below: 100", -400.0, None),
        ("limit_below: -100", 400.0, None),
    ],
)
def test_utilisation_needs_a_value_and_a_level_above_zero(site, levels, value, utilisation):
    assert standing_of(site, value, levels).utilisation == utilisation


@pytest.mark.parametrize("sign", [1, -1])
def test_a_value_within_a_millionth_of_a_millionth_of_its_limit_is_not_past_it(site, sign):
    """Design, section 6: over when distance > 0 beyond 1e-12 of the limit."""
    levels = f"limit: {sign * 1000000}"
    just, more = sign * 1e6 + 0.9e-6, sign * 1e6 + 1.1e-6

    assert standing_of(site, just, levels).standing is Standing.WITHIN
    assert standing_of(site, more, levels).standing is Standing.OVER
    assert standing_of(site, just, f"near: {sign * 1000000 - 1}, {levels}").standing is Standing.NEAR


def test_a_limit_of_zero_has_no_room(site):
    assert standing_of(site, 5e-324, "limit: 0").standing is Standing.OVER
    assert standing_of(site, -5e-324, "limit_below: 0").standing is Standing.OVER
    site.positions("quay,,", "west,,", "east,,")
    assert site.answers()["net", "book:quay"].standing is Standing.WITHIN


def test_an_unmeasured_standing_has_a_reason_and_nothing_else(site):
    site.settle(rules(rule("w", "{name: weight}", "limit: 10 %", "of_nav", applies_to="{book: quay}")))
    answer = site.answers()["w", "book:quay"]

    assert answer.standing is Standing.UNMEASURED
    assert (answer.value, answer.distance, answer.utilisation) == (None, None, None)
    assert answer.reason == "no NAV of quay on or before 2026-03-06 is known"


@given(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6), st.floats(0, 1e6))
def test_the_side_told_is_the_one_further_past(value, low, width):
    from dataclasses import replace

    from monitor.limits.context import RuleContext
    from monitor.limits.defaults import Defaults
    from monitor.limits.evaluate import _held
    from monitor.limits.rules import read_rules

    context = RuleContext(("quay",), (), ("desk",), "desk", Defaults())
    (made,) = read_rules([("r", b"rules:\n  - {id: r, measure: {name: net}, limit: 1, unit: amount}\n")], context)
    both = replace(made, limit=low + width, limit_below=low)

    standing, side, distance = _held(both, value)

    assert distance == max(value - both.limit, both.limit_below - value)
    assert (standing is Standing.OVER) == (
        distance > 1e-12 * abs(both.limit if side is Side.ABOVE else both.limit_below)
    )
    assert math.isfinite(distance)
