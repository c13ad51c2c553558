"""Plans and assessments as users see them: one object, as attributes, frames and plain data.

Owns the shape of results; numbers come from an evaluation and are not worked out again here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd

Data = dict[str, Any]


@dataclass(frozen=True, eq=False, kw_only=True)
class Outcome:
    """What doses do and cost: the common part of a plan and an assessment.

    Attributes
    ----------
    doses
        mg/L of pure compound fed, per m3 of feed; keys ``reagent`` or ``reagent@stage``. They go
        into `optimiser.assess` unchanged and give the same cost.
    cost
        Cause to currency per year, with ``total``.
    compliant
        Whether every limit, pH window and safety rule holds at every state.
    data
        The plain data of `to_dict`.
    """

    doses: Mapping[str, float]
    cost: Mapping[str, float]
    compliant: bool
    data: Data = field(repr=False)

    @cached_property
    def limits(self) -> pd.DataFrame:
        """Every limit: prediction, target and margin, residual and carry-over apart."""
        return self._frame("limits")

    @cached_property
    def purchases(self) -> pd.DataFrame:
        """What is bought on each offer in a year."""
        return self._frame("purchases")

    @cached_property
    def feeding(self) -> pd.DataFrame:
        """Every dose as the operator feeds it."""
        return self._frame("feeding")

    @cached_property
    def water(self) -> pd.DataFrame:
        """PH, ionic strength, sum of ions and H2S through the train."""
        return self._frame("water")

    @cached_property
    def burden(self) -> pd.DataFrame:
        """Burden of feed and effluent. [mg/L]"""
        import pandas as pd

        return pd.DataFrame(self.data["burden"]).T.rename_axis("burden").reset_index()

    @property
    def set_points(self) -> list[Data]:
        """What the operator sets, stage by stage."""
        return list(self.data["set_points"])

    @property
    def sludge(self) -> Data:
        """Solids by kind, dry and wet, with the class and the rule that set it."""
        return dict(self.data["sludge"])

    @property
    def cautions(self) -> list[str]:
        """Cautions that apply."""
        return list(self.data["cautions"])

    @property
    def proof(self) -> Data:
        """Certificate of the states and what was examined."""
        return dict(self.data["proof"])

    def to_dict(self) -> Data:
        """Everything as plain data, what ``--json`` prints."""
        return self.data

    def _frame(self, name: str) -> pd.DataFrame:
        import pandas as pd

        return pd.DataFrame(self.data[name])

    def __repr__(self) -> str:
        kind = type(self).__name__
        doses = ", ".join(f"{k} {v:.4g} mg/L" for k, v in self.doses.items())
        verdict = "meets every limit" if self.compliant else "misses a limit"
        currency = self.data["site"]["currency"]
        return f"{kind}({doses}: {currency} {self.cost['total']:,.0f} a year, {verdict})"


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class Assessment(Outcome):
    """What given doses do and cost."""


@dataclass(frozen=True, eq=False, kw_only=True, repr=False)
class Plan(Outcome):
    """The cheapest verified plan found."""

    @property
    def runners_up(self) -> list[Data]:
        """Other recipes that comply, cheapest first, each verified."""
        return list(self.data["runners_up"])
