"""Chemical formulas and reactions: reading them, their charge, elements and molar mass.

Owns the notation (``Cu+2``, ``SO4-2``, ``(EDTA)-4``, ``Zn(OH)2(s,am)``) and the atomic weights;
knows nothing of equilibrium.
"""

from __future__ import annotations

import re
from functools import lru_cache

from chemistry.errors import FormulaError

# Standard atomic weights, abridged to five significant figures where known.
# Source: IUPAC Commission on Isotopic Abundances and Atomic Weights, 2021 table
# (Prohaska et al. 2022, Pure Appl. Chem. 94, 573), from memory.
ATOMIC_WEIGHTS_G_PER_MOL: dict[str, float] = {
    "H": 1.008, "C": 12.011, "N": 14.007, "O": 15.999, "F": 18.998, "Na": 22.990,
    "Mg": 24.305, "Al": 26.982, "Si": 28.085, "P": 30.974, "S": 32.06, "Cl": 35.45,
    "K": 39.098, "Ca": 40.078, "Cr": 51.996, "Mn": 54.938, "Fe": 55.845, "Co": 58.933,
    "Ni": 58.693, "Cu": 63.546, "Zn": 65.38, "As": 74.922, "Se": 78.971, "Sr": 87.62,
    "Ag": 107.868, "Cd": 112.414, "Sn": 118.710, "Sb": 121.760, "Ba": 137.327,
    "Hg": 200.592, "Pb": 207.2,
}  # fmt: skip

# Ligands written by a short name: the anion's elements (for molar mass and balance).
LIGAND_FORMULAS: dict[str, str] = {
    "EDTA": "C10H12N2O8",
    "NTA": "C6H6NO6",
    "Cit": "C6H5O7",
    "Tart": "C4H4O6",
    "Ox": "C2O4",
    "Gluc": "C6H11O7",
}

_PHASE = re.compile(r"\((?:aq|s|g|l)(?:,[^)]*)?\)$")
_CHARGE = re.compile(r"([+-])(\d*)$")
_TOKEN = re.compile(r"([A-Z][a-z]?)(\d*)|(\()|(\))(\d*)|(\.)(\d*)")


def strip_phase(formula: str) -> str:
    """Return the formula without its phase note ``(aq)``, ``(s)``, ``(s,am)``."""
    return _PHASE.sub("", formula.strip())


@lru_cache(maxsize=4096)
def charge_of(formula: str) -> int:
    """Return the charge number written at the end of a formula (``SO4-2`` gives -2)."""
    body = strip_phase(formula)
    if body != formula.strip():
        return 0
    match = _CHARGE.search(body)
    if match is None:
        return 0
    size = int(match.group(2)) if match.group(2) else 1
    return size if match.group(1) == "+" else -size


def _expand_ligands(body: str) -> str:
    for name, elements in LIGAND_FORMULAS.items():
        body = body.replace(f"({name})", f"({elements})")
    return body


@lru_cache(maxsize=4096)
def _elements(formula: str) -> tuple[tuple[str, float], ...]:
    body = _CHARGE.sub("", strip_phase(formula)) if charge_of(formula) else strip_phase(formula)
    counts: dict[str, float] = {}
    for part in _expand_ligands(body).split("."):
        lead = re.match(r"\d+", part)
        times = int(lead.group()) if lead else 1
        group = _group_counts(part[lead.end() :] if lead else part, formula)
        if not group or not times or not all(group.values()):
            raise FormulaError(f"cannot read {formula!r}: a part of it holds no atoms")
        for element, count in group.items():
            counts[element] = counts.get(element, 0.0) + times * count
    return tuple(sorted(counts.items()))


def _group_counts(text: str, formula: str) -> dict[str, float]:
    stack: list[dict[str, float]] = [{}]
    position = 0
    while position < len(text):
        match = _TOKEN.match(text, position)
        if match is None or match.group(6):
            raise FormulaError(f"cannot read {formula!r} at {text[position:]!r}")
        if match.group(1):
            if match.group(1) not in ATOMIC_WEIGHTS_G_PER_MOL:
                raise FormulaError(f"unknown element {match.group(1)!r} in {formula!r}")
            top = stack[-1]
            top[match.group(1)] = top.get(match.group(1), 0.0) + int(match.group(2) or 1)
        elif match.group(3):
            stack.append({})
        else:
            if len(stack) == 1:
                raise FormulaError(f"bracket closed but never opened in {formula!r}")
            inner = stack.pop()
            for element, count in inner.items():
                stack[-1][element] = stack[-1].get(element, 0.0) + count * int(match.group(5) or 1)
        position = match.end()
    if len(stack) != 1:
        raise FormulaError(f"bracket opened but never closed in {formula!r}")
    return stack[0]


def elements_of(formula: str) -> dict[str, float]:
    """Count the atoms in a formula.

    Raises
    ------
    FormulaError
        The formula cannot be read.

    Examples
    --------
    >>> elements_of("CaSO4.2H2O")
    {'Ca': 1.0, 'H': 4.0, 'O': 6.0, 'S': 1.0}
    """
    return dict(_elements(formula))


def molar_mass_g_per_mol(formula: str) -> float:
    """Molar mass from the atomic weights [g/mol].

    Examples
    --------
    >>> round(molar_mass_g_per_mol("NaOH"), 3)
    39.997
    """
    return sum(ATOMIC_WEIGHTS_G_PER_MOL[element] * n for element, n in _elements(formula))


def _read_side(text: str) -> dict[str, float]:
    side: dict[str, float] = {}
    for term in re.split(r"\s+\+\s+", text.strip()):
        match = re.fullmatch(r"(?:(\d+(?:\.\d+)?)\s+)?(\S+)", term.strip())
        if match is None:
            raise FormulaError(f"cannot read the term {term!r}")
        side[match.group(2)] = side.get(match.group(2), 0.0) + float(match.group(1) or 1)
    return side


def read_reaction(reaction: str) -> dict[str, float]:
    """Read a reaction as signed coefficients: reactants negative, products positive.

    Raises
    ------
    FormulaError
        No single ``=``, or a term that cannot be read.

    Examples
    --------
    >>> read_reaction("Cu+2 + 2 H2O = Cu(OH)2(aq) + 2 H+")
    {'Cu+2': -1.0, 'H2O': -2.0, 'Cu(OH)2(aq)': 1.0, 'H+': 2.0}
    """
    sides = reaction.split(" = ")
    if len(sides) != 2:
        raise FormulaError(f"a reaction needs one ' = ': {reaction!r}")
    signed: dict[str, float] = {}
    for name, count in _read_side(sides[0]).items():
        signed[name] = signed.get(name, 0.0) - count
    for name, count in _read_side(sides[1]).items():
        signed[name] = signed.get(name, 0.0) + count
    return {name: count for name, count in signed.items() if count != 0.0}


def check_balance(reaction: str) -> list[str]:
    """Return what does not balance in a reaction (elements, charge); empty when it balances."""
    surplus: dict[str, float] = {}
    charge = 0.0
    for name, count in read_reaction(reaction).items():
        charge += count * charge_of(name)
        for element, number in _elements(name):
            surplus[element] = surplus.get(element, 0.0) + count * number
    problems = [f"{e} by {v:+g}" for e, v in surplus.items() if abs(v) > 1e-9]
    if abs(charge) > 1e-9:
        problems.append(f"charge by {charge:+g}")
    return problems
