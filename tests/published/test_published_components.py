"""Components of value at risk against published worked examples."""

import math
from decimal import Decimal

import numpy as np
import pytest
from published_series import correlated

from monitor.risk.components import elliptical_components, group_pnl, marginal
from monitor.risk.leave_one_out import incremental, leave_one_out_by
from monitor.risk.normal import normal

NINETY_FIVE, NINETY_NINE = Decimal("0.95"), Decimal("0.99")
TOGETHER = np.array([0, 0]), np.array([0, 1])


def test_hulls_two_positions_together():
    """RMFI: $10m at 2 % and $5m at 1 % a day, correlation .3: sigma 220,227; VaR 513,129 at z = 2.33; diversification
    over ten days 219,369 (confirmed second-hand, recomputed). The components are not printed there; they must add up
    to that VaR, and be sigma_i (sigma_i + rho sigma_j) / sigma times z (recomputed)."""
    rounded_z = 2.33 / 2.3263478740
    pnl = np.stack(correlated(200_000, 50_000, 0.3))
    for days, value_at_risk in ((1, 513_129), (10, 1_622_657)):
        tail = normal(group_pnl(pnl, *TOGETHER, 1), NINETY_NINE, days)
        found = elliptical_components(pnl, *TOGETHER, tail, days).value_at_risk
        by_hand = [
            2.33 * math.sqrt(days) * sigma * (sigma + 0.3 * other) / 220_227.155
            for sigma, other in ((200_000, 50_000), (50_000, 200_000))
        ]
        np.testing.assert_allclose(found.component * rounded_z, by_hand, rtol=1e-8)
        assert found.component.sum() * rounded_z == pytest.approx(value_at_risk, abs=1)

    alone = normal(pnl, NINETY_NINE, 10).value_at_risk.value
    assert (alone - found.component).sum() * rounded_z == pytest.approx(219_369, abs=1)


def test_jorions_two_currencies():
    """Jorion 2007, Value at Risk, 3rd ed., ch. 7: $2m in one currency (5 % a year) and $1m in another (12 %), not
    correlated, z = 1.65: VaR 257,738; components 105,630 and 152,108; marginals .0528 and .1521 (from memory;
    recomputed, all agree). Without the second currency VaR is 165,000 (2m x .05 x 1.65)."""
    rounded_z = 1.65 / 1.6448536270
    pnl = np.stack(correlated(100_000, 120_000, 0.0))
    whole = normal(group_pnl(pnl, *TOGETHER, 1), NINETY_FIVE)
    found = elliptical_components(pnl, *TOGETHER, whole).value_at_risk
    assert [round(part) for part in found.component * rounded_z] == pytest.approx([105_630, 152_108], abs=1)
    assert found.component.sum() * rounded_z == pytest.approx(257_738, abs=1)
    assert found.factor.tolist() == [1.0]

    rates = marginal(found.component, np.array([2e6, 1e6]))
    assert [round(rate, 4) for rate in rates.value * rounded_z] == [0.0528, 0.1521]

    without = leave_one_out_by(lambda rows: normal(rows, NINETY_FIVE), group_pnl(pnl, *TOGETHER, 1), pnl, *TOGETHER)
    assert without.value_at_risk.value[1] * rounded_z == pytest.approx(165_000, rel=1e-9)
    added = incremental(whole.value_at_risk, without.value_at_risk, TOGETHER[0])
    assert added.value[1] * rounded_z == pytest.approx(257_738 - 165_000, abs=1)
