"""The proof of a plan as text: searched or proven, and the certificate of its states."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import money, number, paragraph

Data = Mapping[str, Any]


def proof_lines(data: Data) -> list[str]:
    """What is known of cheaper plans, the certificate of the states and where the time went."""
    proof = data["proof"]
    lines = []
    if proof["kind"] == "searched":
        lines += paragraph(
            f"Searched: no cheaper plan turned up in {_recipes(proof)},"
            f" {_count(proof, 'cells_examined', 'cell')} of doses and pH and "
            f"{_count(proof, 'states_examined', 'equilibrium state')}; the smallest step tried was "
            f"{number(proof['smallest_step_percent'], 2)} % of a dose. A search, not a bound: a "
            "cheaper plan between the points tried is not excluded."
        )
        lines += _bounded(data)
    elif proof["kind"] == "proven":
        lines += paragraph(_proven(data))
    else:
        count = proof.get("states_examined")
        states = f" in {_count(proof, 'states_examined', 'equilibrium state')}" if count else ""
        lines += paragraph(f"Verified{states}; nothing was searched for.")
    if proof.get("stopped_early"):
        lines += paragraph("The time limit ended the search before it was through.")
    found = {name: f"{value:.0e}" if value else "0" for name, value in proof["certificate"].items()}
    lines += paragraph(
        f"Certificate, worst over the states of this result: mass balance {found['mass_balance']}, "
        f"supersaturation {found['supersaturation']} and distance of present solids from "
        f"saturation {found['presence']} (log10 units), charge {found['charge']}."
    )
    seconds = ", ".join(f"{name} {value:.1f} s" for name, value in proof["seconds"].items())
    return lines + (paragraph(f"Time: {seconds}.") if seconds else [])


def _proven(data: Data) -> str:
    proof, currency = data["proof"], data["site"]["currency"]
    return (
        f"Proven: no plan that the site allows costs less than {currency} "
        f"{money(proof['lower_bound_per_year'])} a year, {100.0 * proof['gap']:.2f} % below this "
        f"one (gap, 1 - bound/cost). {_cells(proof)}"
    )


def _bounded(data: Data) -> list[str]:
    """What a bound that is too weak to prove the plan still says."""
    proof, currency = data["proof"], data["site"]["currency"]
    if "not_bounded_because" in proof:
        return paragraph(f"No lower bound: {proof['not_bounded_because']}.")
    if "lower_bound_per_year" not in proof:
        return []
    return paragraph(
        f"No plan that the site allows costs less than {currency} "
        f"{money(proof['lower_bound_per_year'])} a year. {_cells(proof)}"
    )


def _cells(proof: Data) -> str:
    closed = proof["bound_cells_closed"]
    why = ", ".join(f"{count:,} by {reason}" for reason, count in closed.items())
    return (
        f"All {_count(proof, 'bound_recipes', 'recipe')} were bounded over the joint equilibrium "
        f"in {_count(proof, 'bound_cells', 'cell')} of pH and doses; closed: {why or 'none'}; left "
        f"open: {proof['bound_cells_open']:,}."
    )


def _recipes(proof: Data) -> str:
    """The recipes examined, and of how many that the site allows."""
    if "recipes_allowed" not in proof:
        return _count(proof, "recipes_examined", "recipe")
    allowed = _count(proof, "recipes_allowed", "recipe")
    size = f"of up to {_count(proof, 'most_reagents', 'reagent')}"
    left = proof["recipes_allowed"] - proof["recipes_examined"]
    out = proof["recipes_ruled_out"]
    why = f" ({out:,} of them by rules of set point and dose alone)" if out else ""
    if left <= out:
        return f"all {allowed} {size}{why}"
    return f"{proof['recipes_examined']:,} of the {allowed} {size}"


def _count(proof: Data, key: str, noun: str) -> str:
    return f"{proof[key]:,} {noun}{'' if proof[key] == 1 else 's'}"
