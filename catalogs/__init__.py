"""Catalogs: constants, reagents, limits and figures of practice, each row with its source.

The public names load on first use, so that importing the package costs nothing. Everything that is
not listed in ``__all__`` may change without notice.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from catalogs.constants import load_system as load_system
    from catalogs.limit_sets import load_limit_sets as load_limit_sets
    from catalogs.reagents import load_reagents as load_reagents

_HOMES = {
    "load_limit_sets": "catalogs.limit_sets",
    "load_reagents": "catalogs.reagents",
    "load_system": "catalogs.constants",
}

__all__ = ["load_limit_sets", "load_reagents", "load_system"]


def __getattr__(name: str) -> object:
    """Load a public name from its module on first use (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module 'catalogs' has no attribute {name!r}")
    value: object = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names, loaded or not."""
    return sorted({*globals(), *_HOMES})
