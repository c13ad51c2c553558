"""Models that the solver tests share."""

from __future__ import annotations

import math
import random

from optimiser.linear_model import Expression, Model, Sense


def blend(need: float = 12.0, room: float = 5.0, *, scale: float = 1.0) -> Model:
    """Two reagents cover a need; the cheaper one has limited room. Least cost 2 room + 5 rest."""
    model = Model("blend")
    model.add_variable("cheap")
    model.add_variable("dear")
    terms = {"cheap": scale, "dear": scale}
    model.add_row("need", terms, Sense.AT_LEAST, scale * need)
    model.add_row("room", {"cheap": 1.0}, Sense.AT_MOST, room)
    model.add_cost("goods", Expression({"cheap": 2.0, "dear": 5.0}, 100.0))
    return model


def market_split(rows: int = 5, columns: int = 50) -> Model:
    """Equality knapsacks: hard to satisfy, so that a short time limit finds nothing."""
    rng = random.Random(3)
    model = Model("market split")
    keys = [model.add_variable(f"x{i}", high=1.0, integer=True) for i in range(columns)]
    for j in range(rows):
        terms = {key: float(rng.randint(0, 99)) for key in keys}
        model.add_row(f"r{j}", terms, Sense.EQUAL, 1170.0)
    model.add_cost("c", Expression(dict.fromkeys(keys, -1.0)))
    return model


def knapsacks(rows: int = 30, columns: int = 300) -> Model:
    """Many knapsacks: solutions come at once, the proof does not."""
    rng = random.Random(5)
    model = Model("knapsacks")
    keys = [model.add_variable(f"x{i}", high=1.0, integer=True) for i in range(columns)]
    for j in range(rows):
        terms = {key: float(rng.randint(1, 99)) for key in keys}
        model.add_row(f"r{j}", terms, Sense.AT_MOST, 4000.0)
    model.add_cost("c", Expression({key: -float(rng.randint(50, 150)) for key in keys}))
    return model


def random_mixed_model(seed: int) -> Model:
    rng = random.Random(seed)
    model = Model(f"random {seed}")
    keys = [
        model.add_variable(f"v {i}", high=rng.choice([3.0, 7.0]), integer=i < 3) for i in range(6)
    ]
    for j in range(4):
        terms = {key: rng.uniform(0.1, 5.0) for key in rng.sample(keys, 4)}
        model.add_row(f"r {j}", terms, Sense.AT_LEAST, rng.uniform(1.0, 8.0))
    model.add_cost("c", Expression({key: rng.uniform(0.5, 9.0) for key in keys}))
    return model


def spread_model(seed: int = 207) -> Model:
    """Costs and coefficients over six decades.

    With this seed CBC 2.10.3 calls a solution optimal at its default tolerances that costs
    0.015 % too much.
    """
    rng = random.Random(seed)
    model = Model(f"spread {seed}")
    keys = [model.add_variable(f"v{i}", high=rng.choice([math.inf, 50.0])) for i in range(30)]
    for j in range(20):
        terms = {key: rng.random() * 10 ** rng.uniform(-3, 1) for key in rng.sample(keys, 8)}
        model.add_row(f"r{j}", terms, Sense.AT_LEAST, 10 * rng.random())
    model.add_cost("c", Expression({key: rng.random() * 10 ** rng.uniform(-3, 3) for key in keys}))
    return model
