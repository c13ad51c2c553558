"""Ranges that the seeded sites are drawn from: `tests.benchmarks.seeded_sites` says how.

Orders of magnitude of the trade (common practice, no source); nothing is taken from a plant.
"""

from __future__ import annotations

from collections.abc import Mapping

# metal: dissolved in the feed, lowest and highest mg/L; daily limit on a peak, mg/L; charge, g/mol
METALS: Mapping[str, tuple[float, float, float, float, int, float]] = {
    "Cu": (6, 45, 0.5, 2.0, 2, 63.55),
    "Zn": (8, 50, 1.0, 3.5, 2, 65.38),
    "Ni": (4, 30, 1.2, 3.5, 2, 58.69),
    "Cr(III)": (3, 25, 0.6, 2.5, 3, 52.0),
    "Fe(III)": (5, 45, 1.0, 5.0, 3, 55.85),
    "Cd": (0.6, 4, 0.15, 0.6, 2, 112.4),
    "Pb": (1, 5, 0.35, 1.0, 2, 207.2),
    "Ag": (8, 30, 0.25, 0.6, 1, 107.9),
    "Hg": (0.5, 2, 0.05, 0.12, 2, 200.6),
    "Ba": (25, 70, 1.5, 4.0, 2, 137.3),
}

ALKALIS = (
    "caustic_soda", "hydrated_lime", "quicklime", "magnesium_hydroxide", "soda_ash",
    "sodium_bicarbonate", "potassium_hydroxide",
)  # fmt: skip
SULFIDES = ("sodium_hydrosulfide", "sodium_sulfide", "ferrous_sulfide")
SULFIDE_TAKEN = frozenset({"Cd", "Hg", "Pb"})  # metals for which a site is allowed sulfide
# metals to draw from (the first always), reagents that every site of the kind has, and the others
ACID = ("Cu", "Zn", "Ni", "Cr(III)", "Fe(III)", "Cd", "Pb")
POOLS: Mapping[str, tuple[tuple[str, ...], tuple[str, ...], tuple[str, ...]]] = {
    "acid": (ACID, ("caustic_soda", "hydrated_lime"), (*ALKALIS, "ferric_chloride")),
    "chloride cap": (
        ("Ag", "Cu", "Zn"),
        ("caustic_soda", "sodium_chloride", "calcium_chloride"),
        ("magnesium_hydroxide", "magnesium_chloride", "hydrochloric_acid", "soda_ash",
         "sodium_hydrosulfide", "potassium_hydroxide"),
    ),
    "sulfide": (
        ("Hg", "Cu", "Zn", "Cd", "Pb", "Fe(III)"),
        ("caustic_soda", "sodium_hydrosulfide"),
        ("soda_ash", "magnesium_hydroxide", "hydrated_lime", "sodium_sulfide", "ferrous_sulfide"),
    ),
    "barium": (
        ("Ba", "Zn", "Cu", "Pb"),
        ("sulfuric_acid", "hydrochloric_acid", "carbon_dioxide", "sodium_sulfate"),
        ("ferric_sulfate", "soda_ash", "sodium_bicarbonate", "ferric_chloride"),
    ),
}  # fmt: skip

# price per tonne of the pure compound, lowest and highest
DRY_PRICE: Mapping[str, tuple[float, float]] = {
    "caustic_soda": (420, 760), "potassium_hydroxide": (850, 1250), "hydrated_lime": (190, 330),
    "quicklime": (150, 250), "magnesium_hydroxide": (380, 680), "soda_ash": (260, 430),
    "sodium_bicarbonate": (380, 620), "carbon_dioxide": (160, 380), "sodium_chloride": (80, 190),
    "calcium_chloride": (280, 480), "magnesium_chloride": (330, 620), "sodium_sulfate": (130, 240),
    "sodium_hydrosulfide": (750, 1300), "sodium_sulfide": (900, 1500),
    "ferrous_sulfide": (900, 1700), "ferric_chloride": (380, 700), "ferric_sulfate": (350, 620),
    "sulfuric_acid": (110, 240), "hydrochloric_acid": (320, 640),
}  # fmt: skip
# form, strengths in percent, density in kg/L of the first strength
FORMS: Mapping[str, tuple[str, tuple[float, ...], float]] = {
    "caustic_soda": ("solution", (50, 32, 25), 1.4), "hydrated_lime": ("powder", (95, 92, 90), 0.5),
    "potassium_hydroxide": ("solution", (50, 45, 45), 1.5),
    "quicklime": ("granules", (91, 88, 85), 0.95), "soda_ash": ("powder", (99, 99, 98), 1.0),
    "magnesium_hydroxide": ("slurry", (58, 53, 61), 1.5),
    "sodium_bicarbonate": ("powder", (99, 99, 98), 0.9),
    "carbon_dioxide": ("liquid", (99.9, 99.5, 99.5), 1.02),
    "sodium_chloride": ("granules", (99, 25, 99), 1.2),
    "calcium_chloride": ("flake", (77, 34, 94), 0.9),
    "magnesium_chloride": ("solution", (30, 47, 30), 1.2),
    "sodium_sulfate": ("powder", (99, 98, 98), 1.4),
    "sodium_hydrosulfide": ("solution", (40, 70, 30), 1.25),
    "sodium_sulfide": ("flake", (60, 60, 60), 0.9),
    "ferrous_sulfide": ("slurry", (12, 12, 12), 1.1),
    "ferric_chloride": ("solution", (40, 40, 38), 1.4),
    "ferric_sulfate": ("solution", (41, 41, 40), 1.5),
    "sulfuric_acid": ("solution", (96, 50, 78), 1.6),
    "hydrochloric_acid": ("solution", (32, 30, 32), 1.16),
}  # fmt: skip
# price factor, freight per tonne, least order in tonnes: bulk, part load, packed
PACKS = (
    ((1.0, 1.0), (18, 28), (12, 24)),
    ((1.1, 1.3), (26, 40), (4, 8)),
    ((1.25, 1.6), (36, 60), (0.5, 1.4)),
)
TIER_WIDTH_T = ((10, 60), (4, 25), (1, 10))  # tonnes a year from one price to the next, by pack
SUPPLIERS = ("Ostermoor Salts", "Fellgate Reagents", "Quillhaven Trading", "Dunmarrow Minerals")
EQUIPMENT: Mapping[str, tuple[float, float]] = {
    "hydrated_lime": (4000, 9000), "quicklime": (8000, 15000), "sodium_hydrosulfide": (4500, 8000),
    "sodium_sulfide": (4500, 8000), "ferrous_sulfide": (2500, 4500), "carbon_dioxide": (2200, 3600),
    "magnesium_hydroxide": (1500, 4000),
}  # fmt: skip
PLAIN_EQUIPMENT = (500, 2200)  # every other reagent

# where the controller may be set; of every other kind it is drawn
SET_POINTS: Mapping[str, tuple[float, float]] = {
    "barium": (7.0, 9.7), "chloride cap": (7.0, 9.2), "sulfide": (8.75, 10.0),
}  # fmt: skip

# ion: charge as counted for the missing anion, g/mol
SALTS = (
    ("Ca", 2, 40.08), ("Mg", 2, 24.31), ("Na", 1, 22.99), ("Cl", -1, 35.45), ("SO4", -2, 96.06),
)  # fmt: skip
