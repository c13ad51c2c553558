"""A mixed-integer linear model in our own words: variables, rows, costs by cause.

Owns what a model is, whether values satisfy it, and how it reads as text; knows no solver.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from enum import Enum

from optimiser.errors import ModelError

FEASIBILITY_TOLERANCE = 1e-6
"""A row may be missed by this much, relative to its largest term or right-hand side."""

INTEGRALITY_TOLERANCE = 1e-5
"""A whole number may be missed by this much by a solver before it is rounded."""


class Sense(Enum):
    """How the two sides of a row compare."""

    AT_MOST = "<="
    AT_LEAST = ">="
    EQUAL = "="


@dataclass(frozen=True, slots=True)
class Expression:
    """A linear expression: coefficient per variable and a constant."""

    terms: Mapping[str, float] = field(default_factory=dict)
    constant: float = 0.0

    def value(self, values: Mapping[str, float]) -> float:
        """Evaluate at a solution."""
        return self.constant + math.fsum(a * values[key] for key, a in self.terms.items())

    def plus(self, other: Expression) -> Expression:
        """Return the sum of two expressions."""
        terms = dict(self.terms)
        for key, coefficient in other.terms.items():
            terms[key] = terms.get(key, 0.0) + coefficient
        return Expression(terms, self.constant + other.constant)

    def times(self, factor: float) -> Expression:
        """Return the expression multiplied by a number."""
        return Expression({k: factor * a for k, a in self.terms.items()}, factor * self.constant)


@dataclass(frozen=True, slots=True, kw_only=True)
class Variable:
    """A decision: its range and whether it takes whole numbers only."""

    key: str
    low: float
    high: float
    integer: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """A linear constraint."""

    key: str
    terms: Mapping[str, float]
    sense: Sense
    rhs: float

    @property
    def largest_coefficient(self) -> float:
        """Largest coefficient by size; 0 for a row without terms."""
        return max((abs(a) for a in self.terms.values()), default=0.0)

    def excess(self, values: Mapping[str, float]) -> float:
        """By how much the row is missed, relative to its own scale; 0 or less where it holds.

        The scale is the largest of the right-hand side and the terms, and never less than the
        smaller of 1 and the largest coefficient, so that rows in small numbers are held strictly.
        """
        products = [a * values[key] for key, a in self.terms.items()]
        gap = math.fsum(products) - self.rhs
        if self.sense is Sense.AT_LEAST:
            gap = -gap
        elif self.sense is Sense.EQUAL:
            gap = abs(gap)
        largest_term = max(map(abs, products), default=0.0)
        floor = min(1.0, self.largest_coefficient) or 1.0
        return gap / max(abs(self.rhs), largest_term, floor)


class Model:
    """Variables, rows and costs by cause, to be minimised in total.

    Every number is checked as it comes in: NaN and infinite coefficients, unknown variables and
    keys used twice are refused, because a solver would take them in silence.

    Examples
    --------
    >>> model = Model("blend")
    >>> lime = model.add_variable("lime", high=10.0)
    >>> model.add_row("enough", {lime: 2.0}, Sense.AT_LEAST, 3.0)
    >>> model.add_cost("goods", Expression({lime: 150.0}))
    >>> model.cost({"lime": 1.5})
    {'goods': 225.0, 'total': 225.0}
    """

    def __init__(self, name: str) -> None:
        self.name = name
        self.variables: dict[str, Variable] = {}
        self.rows: dict[str, Row] = {}
        self.costs: dict[str, Expression] = {}

    def add_variable(
        self, key: str, *, low: float = 0.0, high: float = math.inf, integer: bool = False
    ) -> str:
        """Add a variable and return its key; a binary is an integer from 0 to 1.

        Raises
        ------
        ModelError
            The key is taken, or the range is empty or not a range.
        """
        if key in self.variables:
            raise ModelError(f"model {self.name!r}: variable {key!r} is there already")
        if not low <= high or low == math.inf or high == -math.inf:
            raise ModelError(f"model {self.name!r}: variable {key!r} from {low} to {high}")
        self.variables[key] = Variable(key=key, low=low, high=high, integer=integer)
        return key

    def add_row(self, key: str, terms: Mapping[str, float], sense: Sense, rhs: float) -> None:
        """Add the constraint ``terms <sense> rhs``.

        Raises
        ------
        ModelError
            The key is taken, a variable is unknown or a number is not finite.
        """
        if key in self.rows:
            raise ModelError(f"model {self.name!r}: row {key!r} is there already")
        self._require_numbers(f"row {key!r}", terms, rhs)
        kept = {name: float(a) for name, a in terms.items() if a != 0.0}
        self.rows[key] = Row(key=key, terms=kept, sense=sense, rhs=float(rhs))

    def add_cost(self, cause: str, amount: Expression) -> None:
        """Add to the cost of one cause; all causes together are minimised.

        Raises
        ------
        ModelError
            The cause is called ``total``, a variable is unknown or a number is not finite.
        """
        if cause == "total":
            raise ModelError(f"model {self.name!r}: the total is the sum of all causes")
        self._require_numbers(f"cost {cause!r}", amount.terms, amount.constant)
        self.costs[cause] = self.costs.get(cause, Expression()).plus(amount)

    @property
    def integers(self) -> tuple[str, ...]:
        """Keys of the variables that take whole numbers only."""
        return tuple(key for key, variable in self.variables.items() if variable.integer)

    @property
    def objective(self) -> Expression:
        """The sum of all costs."""
        terms: dict[str, float] = {}
        for amount in self.costs.values():
            for key, coefficient in amount.terms.items():
                terms[key] = terms.get(key, 0.0) + coefficient
        return Expression(terms, math.fsum(amount.constant for amount in self.costs.values()))

    def cost(self, values: Mapping[str, float]) -> dict[str, float]:
        """Cost by cause at a solution, with ``total``."""
        by_cause = {cause: amount.value(values) for cause, amount in self.costs.items()}
        return {**by_cause, "total": math.fsum(by_cause.values())}

    def highest(self, expression: Expression) -> float:
        """Largest value that the variables' ranges alone allow an expression to take."""
        total = expression.constant
        for key, coefficient in expression.terms.items():
            if coefficient != 0.0:
                variable = self.variables[key]
                total += coefficient * (variable.high if coefficient > 0 else variable.low)
        return total

    def relaxed(self) -> Model:
        """Return the same model with every integer variable made continuous."""
        return self._with([replace(v, integer=False) for v in self.variables.values()])

    def with_integers_fixed(self, values: Mapping[str, float]) -> Model:
        """Return the linear model that is left when the integers keep the values of a solution."""
        fixed = []
        for variable in self.variables.values():
            if variable.integer:
                whole = float(round(values[variable.key]))
                fixed.append(replace(variable, low=whole, high=whole, integer=False))
            else:
                fixed.append(variable)
        return self._with(fixed)

    def without_costs(self) -> Model:
        """Return the model that asks only whether the rows can be met."""
        copy = self._with(self.variables.values())
        copy.costs = {}
        return copy

    def violations(self, values: Mapping[str, float]) -> list[str]:
        """Say what a solution misses, worst first; empty where it holds.

        Ranges and whole numbers are held exactly, rows to `FEASIBILITY_TOLERANCE` of their scale.
        """
        found: list[tuple[float, str]] = []
        for variable in self.variables.values():
            x = values.get(variable.key, math.nan)
            if not variable.low <= x <= variable.high:
                said = f"{variable.key} = {x:.9g} lies outside {_range_text(variable)}"
                found.append((math.inf, said))
            elif variable.integer and x != round(x):
                found.append((math.inf, f"{variable.key} = {x:.9g} is no whole number"))
        if found:
            return [said for _, said in found]
        for row in self.rows.values():
            excess = row.excess(values)
            if not excess <= FEASIBILITY_TOLERANCE:
                side = Expression(row.terms).value(values)
                said = f"{row.key}: {side:.9g} {row.sense.value} {row.rhs:.9g} does not hold"
                found.append((excess, said))
        return [said for _, said in sorted(found, key=lambda item: -item[0])]

    def to_text(self) -> str:
        """Write the model out in readable algebra, in order of building."""
        lines = [f"model {self.name}", "", "minimise"]
        lines += [f"  {cause}: {_algebra(amount)}" for cause, amount in self.costs.items()]
        lines += ["", "subject to"]
        for row in self.rows.values():
            left = _algebra(Expression(row.terms))
            lines.append(f"  {row.key}: {left} {row.sense.value} {_number(row.rhs)}")
        lines += ["", "where"]
        for variable in self.variables.values():
            kind = "whole number" if variable.integer else "number"
            lines.append(f"  {variable.key}: {kind}, {_range_text(variable)}")
        return "\n".join(lines) + "\n"

    def _require_numbers(self, what: str, terms: Mapping[str, float], constant: float) -> None:
        for key, number in [*terms.items(), ("constant", constant)]:
            if not math.isfinite(number):
                raise ModelError(f"model {self.name!r}: {what}: {key!r} comes with {number}")
        unknown = sorted(terms.keys() - self.variables.keys())
        if unknown:
            raise ModelError(f"model {self.name!r}: {what}: no variable {', '.join(unknown)}")

    def _with(self, variables: Iterable[Variable]) -> Model:
        copy = Model(self.name)
        copy.variables = {variable.key: variable for variable in variables}
        copy.rows = dict(self.rows)
        copy.costs = dict(self.costs)
        return copy


def _number(value: float) -> str:
    return f"{value:.10g}"


def _range_text(variable: Variable) -> str:
    return f"{_number(variable.low)} to {_number(variable.high)}"


def _algebra(expression: Expression) -> str:
    text = ""
    for key, a in expression.terms.items():
        sign = ("-" if a < 0 else "") if not text else (" - " if a < 0 else " + ")
        size = "" if abs(a) == 1.0 else f"{_number(abs(a))} "
        text += f"{sign}{size}{key}"
    if expression.constant or not text:
        c = expression.constant
        sign = ("-" if c < 0 else "") if not text else (" - " if c < 0 else " + ")
        text += f"{sign}{_number(abs(c))}"
    return text
