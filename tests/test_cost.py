"""The shared cost against values worked out by hand, as a spreadsheet would."""

import math
from typing import Any

import numpy as np
import pytest

from idlearn.cost import BoundCost, Cost, CostTerm, default_cost, primary_of
from idlearn.errors import InputError

OUTPUTS, ACTUATORS = ["t", "p"], ["v", "w"]
Y = np.array([[10.0, 3.0], [12.0, -1.0]])
SETPOINT = np.array([[9.0], [15.0]])  # of p: see CONTROLLED
U = np.array([[40.0, 5.0], [60.0, 8.0]])
MOVE = np.array([[2.0, -1.0], [-4.0, 0.5]])
CONTROLLED = (1,)


def bound(*terms: CostTerm) -> BoundCost:
    return BoundCost([Cost(name="c", terms=terms)], OUTPUTS, ACTUATORS, CONTROLLED)


def term(**entries: Any) -> CostTerm:
    return CostTerm(**entries)


@pytest.mark.parametrize(
    ("entries", "squared", "absolute"),
    [
        # weight * (value / scale)^2 and weight * |value / scale|, weight 3, scale 2
        # p - setpoint: 3 - 9 = -6; -1 - 15 = -16
        ({"kind": "tracking", "signal": "p"}, [27.0, 192.0], [9.0, 24.0]),
        # t - 11: -1; 1
        ({"kind": "level", "signal": "t", "target": 11.0}, [0.75, 0.75], [1.5, 1.5]),
        # moves of w: -1; 0.5
        ({"kind": "move", "signal": "w"}, [0.75, 0.1875], [1.5, 0.75]),
        # v - 50: -10; 10
        ({"kind": "energy", "signal": "v", "reference": 50.0}, [75.0, 75.0], [15.0, 15.0]),
        # t beyond [-inf, 11]: 0; 1
        ({"kind": "outside", "signal": "t", "high": 11.0}, [0.0, 0.75], [0.0, 1.5]),
        # p beyond [0, 2]: 1; 1 below
        ({"kind": "outside", "signal": "p", "low": 0.0, "high": 2.0}, [0.75, 0.75], [1.5, 1.5]),
        # v beyond [44, 50]: 4 below; 10 above
        ({"kind": "outside", "signal": "v", "low": 44.0, "high": 50.0}, [12.0, 75.0], [6.0, 15.0]),
        # a trip counts 1: 3 / 4, 3 / 2; only the second episode tripped
        ({"kind": "trip"}, [0.0, 0.75], [0.0, 1.5]),
    ],
)
def test_every_kind_and_shape(
    entries: dict[str, Any], squared: list[float], absolute: list[float]
) -> None:
    tripped = np.array([False, True])
    for shape, wanted in (("squared", squared), ("absolute", absolute)):
        cost = bound(term(weight=3.0, scale=2.0, shape=shape, **entries))
        stage = cost.stage(Y, SETPOINT, U, MOVE, tripped)
        np.testing.assert_allclose(stage, np.array(wanted)[:, None], rtol=1e-15)


def test_terms_add_up_by_cost_and_over_leading_axes() -> None:
    costs = BoundCost(
        [
            Cost(
                name="a", terms=(term(kind="tracking", signal="p"), term(kind="move", signal="v"))
            ),
            Cost(name="b", terms=(term(kind="energy", signal="w", weight=0.5),)),
        ],
        OUTPUTS, ACTUATORS, CONTROLLED,
    )  # fmt: skip
    assert costs.names == ("tracking p", "move v", "energy w")
    stage = costs.stage(Y, SETPOINT, U, MOVE)
    np.testing.assert_allclose(stage, [[36.0, 4.0, 12.5], [256.0, 16.0, 32.0]])
    np.testing.assert_allclose(costs.totals(stage), [[40.0, 12.5], [272.0, 32.0]])
    deep = costs.stage(*(np.stack([a, 2 * a, a]) for a in (Y, SETPOINT, U, MOVE)))
    assert deep.shape == (3, 2, 3)
    np.testing.assert_allclose(deep[1], 4 * stage)
    np.testing.assert_array_equal(costs.totals(deep)[2], costs.totals(stage))


def test_inputs_are_left_alone() -> None:
    kept = [a.copy() for a in (Y, SETPOINT, U, MOVE)]
    bound(term(kind="level", signal="t", target=3.0, scale=2.0)).stage(*kept)
    for a, b in zip(kept, (Y, SETPOINT, U, MOVE), strict=True):
        np.testing.assert_array_equal(a, b)


def test_riccati_weights_are_the_quadratic_form_of_the_stage_cost() -> None:
    cost = bound(
        term(kind="tracking", signal="p", weight=2.0, scale=4.0),
        term(kind="level", signal="t", weight=3.0, scale=0.5, target=7.0),
        term(kind="move", signal="v", weight=0.1, scale=0.2),
        term(kind="energy", signal="w", weight=0.3, reference=6.0),
        term(kind="energy", signal="w", weight=0.1, reference=2.0),
    )
    w = cost.riccati()
    assert w.exact
    assert w.output.tolist() == [12.0, 0.125]
    np.testing.assert_allclose(w.move, [2.5, 0.0], rtol=1e-15)
    np.testing.assert_allclose(w.energy, [0.0, 0.4], rtol=1e-15)
    np.testing.assert_allclose(w.reference, [0.0, 5.0])  # (0.3 * 6 + 0.1 * 2) / 0.4
    assert w.target[0] == 7.0
    assert math.isnan(w.target[1])
    # against the stage cost itself: equal but for the part that no input changes
    rng = np.random.default_rng(1)
    y, sp, u, move = (rng.standard_normal((50, c)) for c in (2, 1, 2, 2))
    stage = cost.totals(cost.stage(y, sp, u, move))[:, 0]
    goal = np.stack([np.full(50, 7.0), sp[:, 0]], axis=1)
    form = ((y - goal) ** 2) @ w.output + (move**2) @ w.move + ((u - w.reference) ** 2) @ w.energy
    np.testing.assert_allclose(stage - form, 0.3 * 1.0**2 + 0.1 * 3.0**2, rtol=1e-9)


@pytest.mark.parametrize(
    "extra",
    [
        term(kind="outside", signal="t", high=1.0),
        term(kind="trip"),
        term(kind="tracking", signal="p", shape="absolute"),
        term(kind="level", signal="p", target=1.0),  # p follows a setpoint
    ],
)
def test_what_is_not_quadratic_is_not_exact(extra: CostTerm) -> None:
    plain = term(kind="tracking", signal="p")
    assert bound(plain).riccati().exact
    assert not bound(plain, extra).riccati().exact


def test_weightless_terms_do_not_spoil_exactness() -> None:
    w = bound(term(kind="tracking", signal="p"), term(kind="trip", weight=0.0)).riccati()
    assert w.exact


@pytest.mark.parametrize(
    ("entries", "message"),
    [
        ({"weight": -1.0}, "weight is -1.0"),
        ({"weight": float("nan")}, "weight is nan"),
        ({"weight": float("inf")}, "weight is inf"),
        ({"scale": 0.0}, "scale is 0.0"),
        ({"scale": float("nan")}, "scale is nan"),
        ({"kind": "level", "target": float("nan")}, "target and reference have to be finite"),
        ({"kind": "outside"}, "needs low, high or both"),
        ({"kind": "outside", "low": 2.0, "high": 1.0}, "low 2.0 is not below high 1.0"),
        ({"kind": "outside", "low": float("nan"), "high": 1.0}, "low nan"),
        ({"signal": ""}, "a tracking term needs the name of its signal"),
        ({"kind": "torque"}, "kind is 'torque'; choose one of tracking, level"),
        ({"shape": "cubic"}, "shape is 'cubic'; choose squared or absolute"),
    ],
)
def test_refused_terms(entries: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        CostTerm(**({"kind": "tracking", "signal": "p"} | entries))


def test_refused_costs() -> None:
    with pytest.raises(InputError, match="cost 'x' has no term with a weight above 0"):
        Cost(name="x", terms=(term(kind="trip", weight=0.0),))
    with pytest.raises(InputError, match="has no term"):
        Cost(name="x", terms=())
    with pytest.raises(InputError, match="'q' is no output of this study"):
        bound(term(kind="tracking", signal="q"))
    with pytest.raises(InputError, match="'t' is no actuator"):
        bound(term(kind="move", signal="t"))
    with pytest.raises(InputError, match="output 't' has no setpoint to track"):
        bound(term(kind="tracking", signal="t"))
    with pytest.raises(InputError, match="'q' is no output"):
        bound(term(kind="outside", signal="q", high=1.0))


def test_primary_cost() -> None:
    a, b = (Cost(name=n, terms=(term(kind="trip"),)) for n in "ab")
    marked = Cost(name="m", terms=(term(kind="trip"),), primary=True)
    assert primary_of([a, b]) == 0
    assert primary_of([a, marked, b]) == 1
    with pytest.raises(InputError, match=r"\['m', 'm'\] are all marked primary"):
        primary_of([marked, a, marked])
    with pytest.raises(InputError, match="declares no cost"):
        primary_of([])


def test_default_cost_charges_one_for_an_error_and_a_tenth_for_a_move_of_the_scale() -> None:
    cost = BoundCost(
        [default_cost(OUTPUTS, CONTROLLED, ACTUATORS, [9.0, 6.0], [2.0, 0.5])],
        OUTPUTS, ACTUATORS, CONTROLLED,
    )  # fmt: skip
    stage = cost.stage(Y[:1], SETPOINT[:1], U[:1], MOVE[:1])
    np.testing.assert_allclose(stage, [[1.0, 0.1, 0.4]])
    assert cost.costs[0].primary
