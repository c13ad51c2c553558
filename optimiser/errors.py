"""Errors of the optimiser and the messages of its solver and purchasing parts.

OptimiserError
├── NoPlan              no doses meet every limit with what the site allows      (exit code 3)
├── NoPurchase          the offers cannot cover the demand                       (exit code 3)
├── NoOrderPlan         no orders keep stock within store, floor and shelf life  (exit code 3)
├── TradeOffError       a trade-off that was asked for wrongly                   (exit code 2)
├── ChartError          a chart that cannot be drawn as it was asked for         (exit code 2)
├── FeedRefused         a feed that must not be planned on as it stands          (exit code 2)
├── Interrupted         stopped by the user or a time limit before a result      (exit code 4)
├── VerificationFault   no plan found holds when it is verified afresh            (exit code 1)
├── ModelError          a model that was put together wrongly                    (exit code 1)
└── SolverError
    ├── SolverUnavailable   the solver asked for is not installed                (exit code 2)
    └── SolverFault         the solver failed or returned what does not hold     (exit code 1)

Mistakes in files and tables that users write are `catalogs.problems.InputFileError` (exit code 2).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import Any, ClassVar

_MOST_SHOWN = 5


class OptimiserError(Exception):
    """Any problem that the optimiser reports to its caller."""

    exit_code: ClassVar[int] = 1


class NoPlan(OptimiserError):  # noqa: N818 - a public name that says what happened
    """No doses were found that meet every limit with what the site allows.

    ``reasons`` holds one sentence for each cause found; ``clashes`` one mapping for each limit that
    cannot be met (``limit``, ``lowest_reachable``, ``target``, ``stopped_by``). ``relaxations``,
    what limits would have to be loosened to, and ``openers``, what else would open a plan, are
    looked for when they are asked for: that takes longer than to see that there is no plan.
    """

    exit_code: ClassVar[int] = 3

    def __init__(
        self,
        message: str,
        *,
        reasons: Iterable[str] = (),
        clashes: Iterable[Mapping[str, object]] = (),
        relaxations: Callable[[], Sequence[Mapping[str, Any]]] = tuple,
        openers: Callable[[], Sequence[Mapping[str, Any]]] = tuple,
    ) -> None:
        self.reasons: tuple[str, ...] = tuple(reasons)
        self.clashes: tuple[Mapping[str, object], ...] = tuple(clashes)
        self._relaxations, self._openers = relaxations, openers
        super().__init__(_with_reasons(message, self.reasons))

    @cached_property
    def relaxations(self) -> tuple[Mapping[str, Any], ...]:
        """The least loosening of each clashing limit that opens a plan."""
        return tuple(self._relaxations())

    @cached_property
    def openers(self) -> tuple[Mapping[str, Any], ...]:
        """What the site does not allow and was tried, what opens a plan first."""
        return tuple(self._openers())


class NoPurchase(OptimiserError):  # noqa: N818 - a public name that says what happened
    """The offers at hand cannot cover the demand; ``reasons`` holds every cause found."""

    exit_code: ClassVar[int] = 3

    def __init__(self, reasons: Iterable[str]) -> None:
        self.reasons: tuple[str, ...] = tuple(reasons)
        super().__init__(_with_reasons("no purchase covers this demand:", self.reasons))


class UnknownOffer(OptimiserError):  # noqa: N818 - says what happened
    """An offer was named that cannot be signed."""

    exit_code: ClassVar[int] = 2

    def __init__(self, name: str, known: Sequence[str]) -> None:
        listing = ", ".join(known)
        super().__init__(
            f"{name}: no offer that could be signed\n    Offers that hold and are not signed yet: "
            f"{listing or 'none'}."
        )


class NoOrderPlan(OptimiserError):  # noqa: N818 - named after what happened, like its siblings
    """No dates and sizes of orders keep the stock as it must be; ``reasons`` says why."""

    exit_code: ClassVar[int] = 3

    def __init__(self, reasons: Iterable[str]) -> None:
        self.reasons: tuple[str, ...] = tuple(reasons)
        super().__init__(_with_reasons("no orders keep the stock as it must be:", self.reasons))


class TradeOffError(OptimiserError):
    """A trade-off that was asked for wrongly."""

    exit_code: ClassVar[int] = 2


class ChartError(OptimiserError):
    """A chart that cannot be drawn as asked: over a file that is there, or of no states."""

    exit_code: ClassVar[int] = 2


def refuse_existing_chart(path: Path | None, *, force: bool) -> None:
    """Refuse a chart that would write over a file, or that has no folder, unless told to.

    Raises
    ------
    ChartError
        The file is there and ``force`` is not given.
    FileNotFoundError
        There is no such folder.
    """
    if path is None:
        return
    if not path.parent.is_dir():
        raise FileNotFoundError(2, "there is no such folder for a chart", str(path.parent))
    if path.exists() and not force:
        raise ChartError(f"{path} exists: give --force to write over it, or another name")


class FeedRefused(OptimiserError):  # noqa: N818 - named after what happened, like its siblings
    """A feed that precipitation must not be planned on as it stands."""

    exit_code: ClassVar[int] = 2


class Interrupted(OptimiserError):  # noqa: N818 - named after what happened, like its siblings
    """Stopped by the user or a time limit before a verified result was found."""

    exit_code: ClassVar[int] = 4


class VerificationFault(OptimiserError):  # noqa: N818 - named after what happened
    """Plans were found, and none holds when its states are solved afresh."""

    def __init__(self, count: int) -> None:
        plans = "1 plan was found and does" if count == 1 else f"{count} plans were found and do"
        super().__init__(f"{plans} not hold when verified afresh, so none is shown")


class ModelError(OptimiserError):
    """A mixed-integer model that was put together wrongly; never the user's fault."""


class SolverError(OptimiserError):
    """Any problem between the optimiser and the solver."""


class SolverUnavailable(SolverError):  # noqa: N818 - named after what happened
    """The solver asked for cannot be used here.

    ``tried`` names the solver, ``how_to_install`` the command that brings it.
    """

    exit_code: ClassVar[int] = 2

    def __init__(self, tried: str, why: str, how_to_install: str) -> None:
        self.tried = tried
        self.how_to_install = how_to_install
        super().__init__(f"solver {tried} cannot be used: {why}\n    {how_to_install}")


class SolverFault(SolverError):  # noqa: N818 - named after what happened
    """The solver failed, or what it returned does not hold when checked."""

    def __init__(self, solver: str, model: str, what: str, details: Sequence[str] = ()) -> None:
        self.solver = solver
        self.details: tuple[str, ...] = tuple(details)
        shown = list(self.details[:_MOST_SHOWN])
        if len(self.details) > _MOST_SHOWN:
            shown.append(f"and {len(self.details) - _MOST_SHOWN} more")
        super().__init__(_with_reasons(f"{solver} on model {model!r}: {what}", shown))


def unknown_solver(name: str, known: Iterable[str]) -> str:
    """Say that no solver goes by this name."""
    return f"there is no solver {name!r}; choose one of: {', '.join(known)}"


def no_offer(reagent: str, sold: Sequence[str]) -> str:
    """Say that nobody sells a reagent that is needed."""
    offered = ", ".join(sold) if sold else "nothing"
    return f"{reagent}: no offer sells it; the offers sell {offered}"


def bad_demand(reagent: str, demand: object) -> str:
    """Say that a demand is no amount."""
    return f"{reagent}: a demand in kg pure per year is a number of 0 or more, found {demand!r}"


def beyond_offers(reagent: str, demand_kg: float, most_kg: float) -> str:
    """Say that the offers' caps do not reach a demand."""
    return (
        f"{reagent}: {demand_kg:,.0f} kg pure a year are needed, the offers sell at most "
        f"{most_kg:,.0f}; raise a volume cap or add an offer"
    )


def unbounded_demand(reagent: str, offer: str) -> str:
    """Say that a least order needs an upper end of the demand."""
    return (
        f"offer {offer!r} has a least order, so the demand of {reagent} must have an upper end; "
        "give the variables behind it finite upper bounds"
    )


def _with_reasons(message: str, reasons: Sequence[str]) -> str:
    return "\n".join([message, *(f"    {reason}" for reason in reasons)])
