"""Strengths as the trade quotes them, turned into kg of pure compound per kg of product.

Owns the words a strength may be given in and what they mean for a reagent.
"""

from __future__ import annotations

from collections.abc import Mapping

from catalogs.reagents import Reagent
from chemistry.formula import elements_of, molar_mass_g_per_mol

COMPOUND = "compound"

_COUNTED: Mapping[str, str] = {
    "CaO": "Ca", "MgO": "Mg", "Na2O": "Na", "K2O": "K", "Na2CO3": "Na", "NaOH": "Na",
    "Ca(OH)2": "Ca", "Na2S": "S", "S": "S", "SO3": "S", "HCl": "Cl", "Cl": "Cl", "Fe": "Fe",
    "Fe2O3": "Fe", "BaO": "Ba",
}  # fmt: skip
"""Words of the trade and the element that is counted through them."""

STRENGTH_WORDS = (COMPOUND, *_COUNTED)


def words_for(reagent: Reagent) -> tuple[str, ...]:
    """Words that a strength of this reagent may be given in.

    Examples
    --------
    >>> from catalogs.reagents import load_reagents
    >>> words_for(load_reagents()["hydrated_lime"])
    ('compound', 'CaO', 'Ca(OH)2')
    """
    atoms = elements_of(reagent.formula)
    return (COMPOUND, *(word for word, element in _COUNTED.items() if element in atoms))


def compound_per_word(reagent: Reagent, word: str) -> float:
    """Mass of the reagent's compound that holds as much of the element as a mass of the word's.

    Parameters
    ----------
    reagent
        Whose formula counts.
    word
        One of `words_for` the reagent.

    Returns
    -------
    float
        [kg compound/kg word]

    Notes
    -----
    ``(M / n) of the reagent / (M / n) of the word`` with ``n`` atoms of the element in each: 1.32
    for hydrated lime as CaO, 1.29 for caustic soda as Na2O.

    Examples
    --------
    >>> from catalogs.reagents import load_reagents
    >>> round(compound_per_word(load_reagents()["hydrated_lime"], "CaO"), 3)
    1.321
    """
    if word == COMPOUND:
        return 1.0
    element = _COUNTED[word]
    per_mol = reagent.molar_mass_g_per_mol / elements_of(reagent.formula)[element]
    return per_mol * elements_of(word)[element] / molar_mass_g_per_mol(word)
