"""The words of laboratories: what a column name or a parameter name stands for.

Owns the step from ``Copper (dissolved) ug/L``, ``CU_D`` or ``NH4-N`` to an analyte or a role, the
fraction, the unit and the basis. Values are read in `catalogs.sample_values`.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

from catalogs.quantities import (
    AMOUNT_UNITS_IN_MOL_PER_L,
    CHARGE_UNITS_IN_MEQ_PER_L,
    FLOW_UNITS_IN_M3_PER_D,
    MASS_UNITS_IN_MG_PER_L,
)
from chemistry.analysis import ANALYTES, METALS

DISSOLVED, TOTAL = "dissolved", "total"
ANALYTE, UNKNOWN, IGNORE = "analyte", "unknown", "ignore"
FLOW, PH, TEMPERATURE, ALKALINITY, ACIDITY, TSS = (
    "flow", "ph", "temperature", "alkalinity", "acidity", "tss",
)  # fmt: skip
MEASURED_ROLES = (FLOW, PH, TEMPERATURE, ALKALINITY, ACIDITY, TSS)
DATE, TIME, SAMPLE, REMARK = "date", "time", "sample", "remark"
PARAMETER, VALUE, UNIT, FRACTION, BASIS, SIGN, LIMIT = (
    "parameter", "value", "unit", "fraction", "basis", "sign", "limit",
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Heading:
    """What a column or a parameter stands for; ``name`` is the analyte id where it is one."""

    role: str
    name: str = ""
    fraction: str = ""
    unit: str = ""
    basis: str = ""
    text: str = ""
    hint: str = ""

    @property
    def key(self) -> tuple[str, str]:
        """What tells measured columns apart: (analyte or role, fraction)."""
        return (self.name or self.role, self.fraction)


_ROLE_WORDS: Mapping[str, tuple[str, ...]] = {
    DATE: (
        "date", "sample date", "sampling date", "date sampled", "sampled", "sampled on", "day",
        "date of sampling", "collection date", "date collected", "date time", "datetime",
        "sample datetime", "sample date time", "date and time", "sampling date time",
    ),
    TIME: ("time", "sample time", "sampling time", "time sampled"),
    SAMPLE: (
        "sample", "sample id", "sample no", "sample number", "sample name", "id", "lab no",
        "lab id", "lab number", "lab ref", "lab reference", "reference", "sample ref", "client id",
        "client sample id", "sample point", "sampling point", "location", "site", "station",
    ),
    REMARK: (
        "remark", "remarks", "comment", "comments", "note", "notes", "method", "matrix", "cas",
        "cas no", "cas number", "laboratory", "analyst", "analysed", "date analysed",
        "date received", "analysis date", "received", "project", "batch", "sampler", "weather",
    ),
    FLOW: ("flow", "flow rate", "flowrate", "daily flow", "q", "discharge", "volume flow"),
    PH: ("ph", "ph value"),
    TEMPERATURE: ("temperature", "temp", "water temperature", "water temp", "t water"),
    ALKALINITY: ("alkalinity", "total alkalinity", "alk", "alkalinity total", "m alkalinity"),
    ACIDITY: ("acidity", "total acidity", "acidity total"),
    TSS: (
        "tss", "total suspended solids", "suspended solids", "suspended solids total", "ss",
        "suspended matter", "total suspended matter",
    ),
    PARAMETER: (
        "parameter", "analyte", "determinand", "determinant", "test", "test name", "element",
        "component", "constituent", "substance", "chemical", "chemical name", "parameter name",
    ),
    VALUE: ("value", "result", "results", "measured value", "concentration", "reading"),
    UNIT: ("unit", "units", "uom", "result unit", "result units", "unit of measure"),
    FRACTION: ("fraction", "sample fraction", "form", "filtration", "filtered", "preparation"),
    BASIS: ("basis", "reported as", "expressed as"),
    SIGN: ("qualifier", "sign", "prefix", "flag", "operator", "result qualifier"),
    LIMIT: (
        "reporting limit", "rl", "lor", "loq", "lod", "mdl", "dl", "detection limit", "mrl", "pql",
        "limit of quantification", "limit of detection", "limit of reporting",
        "quantification limit", "method detection limit",
    ),
}  # fmt: skip
LIMIT_WORDS = frozenset(_ROLE_WORDS[LIMIT])

_ANALYTE_WORDS: Mapping[str, tuple[str, ...]] = {
    "Al": ("aluminum",), "Fe(II)": ("fe2", "feii", "iron ii", "ferrous"),
    "Fe(III)": ("fe3", "feiii", "iron iii", "ferric"),
    "Cr(III)": ("cr3", "criii", "chromium iii", "chrome iii"),
    "Cr(VI)": ("cr6", "crvi", "chromium vi", "chromium 6", "hexavalent chrome", "hex chrome"),
    "CN": ("cyanide free", "free cn", "cyanide", "cn free"),
    "SO4": ("sulphate",), "S": ("sulfide", "sulphide", "s2", "dissolved sulfide"),
    "NH4": (), "CO3": (), "HCO3": ("bicarbonate", "hydrogencarbonate", "hydrogen carbonate"),
    "PO4": ("orthophosphate", "ortho phosphate", "orthophosphate"),
    "citrate": ("citric acid",), "EDTA": ("edta",), "NTA": ("nta",),
}  # fmt: skip
_WITH_BASIS: Mapping[str, tuple[str, str]] = {
    # name without its suffix: analyte, and the basis that must be written beside it
    "ammonia": ("NH4", "N"), "nh3": ("NH4", "N"), "ammoniacal nitrogen": ("NH4", ""),
    "ammonia nitrogen": ("NH4", ""), "ammonium nitrogen": ("NH4", ""),
    "phosphate": ("PO4", "P"), "total phosphate": ("PO4", "P"),
}  # fmt: skip
_ELEMENTS = {"fe": "Fe", "iron": "Fe", "cr": "Cr", "chromium": "Cr", "chrome": "Cr"}
_HINTS: Mapping[str, str] = {
    "s": "as an element sulfur is not sulfide; name the column sulfide where it is",
    "cyanide total": "total cyanide holds more than free cyanide; give the free one",
    "total cyanide": "total cyanide holds more than free cyanide; give the free one",
    "citric acid": "citrate is given as the anion",
}
_FRACTIONS: Mapping[str, str] = {
    "dissolved": DISSOLVED, "diss": DISSOLVED, "filtered": DISSOLVED, "filt": DISSOLVED,
    "filterable": DISSOLVED, "soluble": DISSOLVED, "sol": DISSOLVED, "d": DISSOLVED,
    "total": TOTAL, "tot": TOTAL, "unfiltered": TOTAL, "unfilt": TOTAL,
    "recoverable": TOTAL, "t": TOTAL, "whole": TOTAL,
}  # fmt: skip
_SHORT_FRACTIONS = ("d", "t")
_DROPPED = {
    "conc", "concentration", "field", "lab", "laboratory", "average", "avg", "mean", "daily",
    "composite", "0", "45", "um", "u", "icp", "ms", "oes", "by", "in", "metal", "metals", "ion",
    "measured", "result",
}  # fmt: skip

_UNIT_SPELLINGS: Mapping[str, str] = {
    **{u.lower(): u for u in MASS_UNITS_IN_MG_PER_L},
    **{u.lower(): u for u in AMOUNT_UNITS_IN_MOL_PER_L},
    **{u.lower(): u for u in CHARGE_UNITS_IN_MEQ_PER_L},
    **{u.lower(): u for u in FLOW_UNITS_IN_M3_PER_D if u != "ML/d"},
    "mcg/l": "ug/L", "m3/day": "m3/d", "m3/hr": "m3/h", "m3/sec": "m3/s", "l/sec": "L/s",
    "l/hr": "L/h", "l/day": "L/d", "lps": "L/s", "lpm": "L/min", "gal/min": "gpm", "usgpm": "gpm",
    "us gpm": "gpm", "gal/d": "gpd", "gal/day": "gpd", "ppm": "ppm", "ppb": "ppb",
    "degc": "degC", "deg c": "degC", "celsius": "degC", "\N{DEGREE SIGN}c": "degC",
    "degf": "degF", "deg f": "degF", "fahrenheit": "degF", "\N{DEGREE SIGN}f": "degF",
    "ph units": "pH", "ph unit": "pH", "s.u.": "pH", "std units": "pH", "standard units": "pH",
}  # fmt: skip
_UNIT = re.compile(
    r"(?<![a-z0-9])("
    + "|".join(re.escape(u) for u in sorted(_UNIT_SPELLINGS, key=len, reverse=True))
    + r")(?![a-z0-9/])"
)
_MEGALITRE = re.compile(r"\bML/d(ay)?\b")
_INVERSE = re.compile(r"\b([mun]?g|[mu]?mol|m?eq|l|m3|ml)[ .\N{MIDDLE DOT}*]*([a-z])-1\b")
_BASES = ("CaCO3", "N", "P", "S", "NH3", "NO3", "PO4", "SO4", "Cu", "Cr")
_BASIS = re.compile(r"(?<=\S)\s*[(\[,]?\s*\b(?:as|expressed as)\s+([a-z0-9]+)\b")
_SUFFIX = re.compile(r"\b(nh3|nh4|po4|so4)\+?[ _-](n|p|s)\b")
_ROMAN = re.compile(r"\(\s*(ii|iii|vi)\s*\)")


def fold(text: str) -> str:
    r"""Bring a name to plain lower case on one line: accents of units and line feeds go.

    Examples
    --------
    >>> fold("Copper\n(\N{MICRO SIGN}g/L)")
    'copper (ug/l)'
    """
    plain = unicodedata.normalize("NFKC", text).replace("\N{GREEK SMALL LETTER MU}", "u")
    plain = plain.replace("\N{MINUS SIGN}", "-").replace("\N{EN DASH}", "-")
    return " ".join(plain.lower().split())


def read_unit(text: str) -> tuple[str, str]:
    """Take the unit out of a name: (unit as the tables spell it or empty, what is left).

    Examples
    --------
    >>> read_unit("Cu, mg/l"), read_unit("Q (m3/day)")
    (('mg/L', 'cu, '), ('m3/d', 'q ( )'))
    """
    if _MEGALITRE.search(text):
        return "ML/d", fold(_MEGALITRE.sub("", text))
    folded = fold(text)
    folded = re.sub(r"\b(litre|liter|dm3)\b", "l", folded).replace(" / ", "/")
    folded = _INVERSE.sub(r"\1/\2", folded)
    match = _UNIT.search(folded)
    if match is None:
        return "", folded
    left = f"{folded[: match.start()]} {folded[match.end() :]}".lstrip()
    return _UNIT_SPELLINGS[match.group(1)], left.replace("  ", " ")


def read_heading(text: str) -> Heading:
    """Say what a column name or a parameter name stands for.

    Parameters
    ----------
    text
        As written by the laboratory, on one or more lines.

    Returns
    -------
    Heading
        Its role is ``unknown`` where the name says nothing that is known here.

    Examples
    --------
    >>> found = read_heading("Copper (dissolved) [ug/L]")
    >>> found.name, found.fraction, found.unit
    ('Cu', 'dissolved', 'ug/L')
    >>> read_heading("NH4-N mg/L").basis
    'N'
    """
    unit, left = read_unit(text)
    basis, left = _read_basis(left)
    words = _words(left)
    if len(words) > 1 and words[0] in ("temp", "temperature") and words[-1] in ("c", "f"):
        unit = unit or f"deg{words.pop().upper()}"
    found = _resolve(words)
    if found is None:
        hint = _HINTS.get(" ".join(words), "")
        return Heading(role=UNKNOWN, unit=unit, basis=basis, text=text, hint=hint)
    role, name, fraction, needed = found
    hint = ""
    if needed and not basis:
        hint = f"{fold(text)} leaves open what the mass is of: write the basis, such as as {needed}"
    if " ".join(words) in ("ammonia nitrogen", "ammoniacal nitrogen", "ammonium nitrogen"):
        basis = "N"
    return Heading(
        role=role, name=name, fraction=fraction, unit=unit, basis=basis, text=text, hint=hint
    )


def read_fraction(text: str) -> str | None:
    """Read a cell of a fraction column; None where it says neither dissolved nor total."""
    words = [word for word in _words(fold(text)) if word in _FRACTIONS]
    if fold(text) in ("yes", "y", "true"):
        return DISSOLVED
    if fold(text) in ("no", "n", "false"):
        return TOTAL
    return _FRACTIONS[words[0]] if words else None


def basis_spelled(text: str) -> str:
    """Spell a basis as the tables do; the text itself where it is none that is known."""
    by_fold = {name.lower(): name for name in (*_BASES, *ANALYTES)}
    return by_fold.get(fold(text), text.strip())


def _read_basis(folded: str) -> tuple[str, str]:
    suffix = _SUFFIX.search(folded)
    if suffix:
        left = folded[: suffix.start()] + suffix.group(1) + folded[suffix.end() :]
        return suffix.group(2).upper(), left
    known = {name.lower() for name in _BASES} | {name.lower() for name in METALS}
    for match in _BASIS.finditer(folded):
        if match.group(1) in known:
            left = folded[: match.start()] + " " + folded[match.end() :]
            return basis_spelled(match.group(1)), left
    bare = re.search(r"\bcaco3\b", folded)
    if bare and folded.replace("caco3", "").strip(" ()[],"):
        return "CaCO3", folded.replace("caco3", " ")
    return "", folded


def _words(folded: str) -> list[str]:
    plain = _ROMAN.sub(r" \1 ", folded)
    plain = re.sub(r"[()\[\]{},;:_./\\|#*\"']", " ", plain)
    plain = re.sub(r"\b(fe|cr)\s?(\d)\+", r"\1\2", plain)
    plain = re.sub(r"\b(fe|cr)\s?\+(\d)", r"\1\2", plain)
    plain = re.sub(r"(?<=[a-z])\s?\d?[+-](?=\s|$)", "", _charged_anions(plain))
    plain = re.sub(r"(?<=[a-z])\+\d(?=\s|$)", "", plain)
    plain = plain.replace("-", " ")
    plain = re.sub(r"\b(fe|cr) (ii|iii|vi)\b", r"\1\2", plain)
    return [word for word in plain.split() if word != "+"]


def _charged_anions(text: str) -> str:
    """Formulas that end in a digit, without their charge: so42- and so4 2- are so4."""
    return re.sub(r"\b(so4|co3|po4|hco3|nh4)\s?\^?\d?[+-]+\d?(?=\s|$)", r"\1", text)


def _resolve(words: list[str]) -> tuple[str, str, str, str] | None:
    """Role, name, fraction and needed basis behind the words of a name."""
    names = _names()
    direct = names.get(" ".join(words))
    if direct is not None and direct[0] != ANALYTE:
        return (*direct[:2], "", direct[2])
    if " ".join(words) in _HINTS:
        return None
    fractions = [_FRACTIONS[word] for word in words if word in _FRACTIONS]
    rest = [word for word in words if word not in _FRACTIONS and word not in _DROPPED]
    if any(word in _SHORT_FRACTIONS for word in words) and not rest:
        return None
    found = names.get(" ".join(rest))
    if found is None:
        each = {names.get(word) for word in rest}
        found = each.pop() if len(each) == 1 else None
    if found is None or len(set(fractions)) > 1:
        return None
    fraction = fractions[0] if fractions and found[0] == ANALYTE else ""
    return found[0], found[1], fraction, found[2]


@lru_cache(maxsize=1)
def _names() -> Mapping[str, tuple[str, str, str]]:
    """Every known name: its role, its analyte and the basis that must stand beside it."""
    names: dict[str, tuple[str, str, str]] = {}
    for role, spellings in _ROLE_WORDS.items():
        names |= dict.fromkeys(spellings, (role, "", ""))
    for analyte in ANALYTES.values():
        own = [" ".join(_words(fold(analyte.analyte))), analyte.name.split(" (")[0]]
        names |= dict.fromkeys((*own, *_ANALYTE_WORDS.get(analyte.analyte, ())), (
            ANALYTE, analyte.analyte, "",
        ))  # fmt: skip
    for spelling, element in _ELEMENTS.items():
        names[spelling] = (ANALYTE, element, "")
    for spelling, (name, basis) in _WITH_BASIS.items():
        names[spelling] = (ANALYTE, name, basis)
    del names["s"]
    return names
