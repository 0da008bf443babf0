"""The rest of an optimal plan is optimal for the rest of the problem, at the same risk aversion.

R. Bellman, "Dynamic Programming", Princeton (1957), chapter III; for execution at fixed lambda,
R. Almgren, N. Chriss, J. Risk 3(2), 5-39 (2001), section 2.
"""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.model.state import imbalance
from tests.builders import order, schedule, variance_of

VOLUME = np.array([0.09, 0.07, 0.06, 0.05, 0.05, 0.06, 0.08, 0.11, 0.16])
QUANTITY = 8e4


def _solved(
    begin: int, quantity: float, initial: float, aim: dict[str, float], model: dict[str, float]
) -> tuple[Array, Array, float]:
    """Slices from bucket `begin` on, Z after each of them, and the deviation of cost."""
    orders = order(VOLUME[begin:], quantity=quantity, initial=initial, **aim, **model)
    shares = schedule(orders, tolerance=1e-13)
    stages = orders.stages
    _, after = imbalance(stages.layout, stages.theta, shares, orders.initial)
    return shares, after, float(np.sqrt(variance_of(orders, shares)[0]))


@pytest.mark.parametrize("reading", [0.0, 4e4, -4e4])
@pytest.mark.parametrize("feedback", [0.0, 1.0])
@pytest.mark.parametrize("exponent", [0.4, 0.5, 1.0])
def test_the_rest_of_a_plan_is_planned_again(
    exponent: float, feedback: float, reading: float
) -> None:
    model = {"exponent": exponent, "feedback": feedback}
    aim = {"risk_aversion": 3e-6}
    plan, after, _ = _solved(0, QUANTITY, reading, aim, model)
    for begin in (2, 5):
        rest, _, _ = _solved(begin, plan[begin:].sum(), after[begin - 1], aim, model)
        assert rest == pytest.approx(plan[begin:], abs=1e-8 * QUANTITY)


def test_an_urgency_used_again_moves_the_rest() -> None:
    """U weighs a deviation, and deviations of parts do not add: why a plan keeps its lambda."""
    model = {"exponent": 0.5, "feedback": 1.0}
    urgency = 2.0
    plan, after, deviation = _solved(0, QUANTITY, 0.0, {"urgency": urgency}, model)
    left = plan[4:].sum()
    implied = {"risk_aversion": urgency / (2.0 * deviation)}
    rest, _, _ = _solved(4, left, after[3], implied, model)
    assert rest == pytest.approx(plan[4:], abs=1e-8 * QUANTITY)
    rest, _, _ = _solved(4, left, after[3], {"urgency": urgency}, model)
    assert np.abs(rest - plan[4:]).max() > 1e-3 * QUANTITY
