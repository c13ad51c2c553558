"""Plans for precipitating dissolved metals: reagents, doses and offers at the least yearly cost.

The public names load on first use, so that importing the package costs nothing. Everything that is
not listed in ``__all__`` may change without notice.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from optimiser.assessment import assess as assess
    from optimiser.chances import explain_chances as explain_chances
    from optimiser.confidence import plan_with_confidence as plan_with_confidence
    from optimiser.contracts import compare_contracts as compare_contracts
    from optimiser.errors import NoPlan as NoPlan
    from optimiser.explain import explain_plan as explain_plan
    from optimiser.floors import explain_floors as explain_floors
    from optimiser.negotiation import negotiate as negotiate
    from optimiser.order_plan import plan_orders as plan_orders
    from optimiser.order_size import steady_order as steady_order
    from optimiser.planning import plan as plan
    from optimiser.purchasing import purchase as purchase
    from optimiser.site_reader import load_site as load_site
    from optimiser.trade_curve import trade_off as trade_off

_HOMES = {
    "NoPlan": "optimiser.errors",
    "assess": "optimiser.assessment",
    "compare_contracts": "optimiser.contracts",
    "explain_chances": "optimiser.chances",
    "explain_floors": "optimiser.floors",
    "explain_plan": "optimiser.explain",
    "load_site": "optimiser.site_reader",
    "negotiate": "optimiser.negotiation",
    "plan": "optimiser.planning",
    "plan_orders": "optimiser.order_plan",
    "plan_with_confidence": "optimiser.confidence",
    "purchase": "optimiser.purchasing",
    "steady_order": "optimiser.order_size",
    "trade_off": "optimiser.trade_curve",
}

__all__ = [
    "NoPlan",
    "assess",
    "compare_contracts",
    "explain_chances",
    "explain_floors",
    "explain_plan",
    "load_site",
    "negotiate",
    "plan",
    "plan_orders",
    "plan_with_confidence",
    "purchase",
    "steady_order",
    "trade_off",
]


def __getattr__(name: str) -> object:
    """Load a public name from its module on first use (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module 'optimiser' has no attribute {name!r}")
    value: object = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names, loaded or not."""
    return sorted({*globals(), *_HOMES})
