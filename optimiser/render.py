"""The text of a plan or an assessment, written from the same dictionary that ``--json`` prints.

Owns the order and the wording of what people read; computes nothing that is not in the data.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from optimiser.render_capacities import capacity_lines
from optimiser.render_gas import gas_lines
from optimiser.render_jar import theory_lines
from optimiser.render_plan_samples import plan_sample_lines
from optimiser.render_proof import proof_lines
from optimiser.render_runners_up import runners_up_lines
from optimiser.render_separators import separator_lines
from optimiser.render_surcharges import surcharge_lines
from optimiser.tables import (
    INDENT,
    PLAIN,
    Ink,
    bullets,
    flow,
    given,
    money,
    number,
    paragraph,
    table,
)

Data = Mapping[str, Any]
_DOSE_DIGITS = 4
_MISSED = "MISSED"
_ROUNDING = 1e-9


def plan_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write a plan for an engineer and a buyer.

    Parameters
    ----------
    data
        ``Plan.to_dict()``.
    ink
        Colours, none by default.
    """
    cost = money(data["cost"]["total"])
    title = f"{data['site']['name']}: cheapest plan found, {data['site']['currency']} {cost} a year"
    if not data["compliant"]:
        title = f"{data['site']['name']}: no plan, the doses below miss a limit"
    return _document(title, data, ink)


def assessment_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write what given doses do and cost, in the same order as a plan."""
    cost = money(data["cost"]["total"])
    verdict = "comply" if data["compliant"] else "do NOT comply"
    title = (
        f"{data['site']['name']}: these doses {verdict} and cost "
        f"{data['site']['currency']} {cost} a year"
    )
    return _document(title, data, ink)


def _document(title: str, data: Data, ink: Ink) -> str:
    lines = [ink.heading(title) if data["compliant"] else ink.bad(title), *_summary(data, ink)]
    sections = (
        ("What the operator sets", _set_points(data)),
        ("Over the samples", plan_sample_lines(data)),
        ("Doses and feed rates", _feeding(data)),
        ("Pumps, feeders and stores", capacity_lines(data, ink)),
        ("What is bought", _purchases(data)),
        (f"Cost, {data['site']['currency']} a year", _cost(data)),
        ("Surcharges by the kilogram", surcharge_lines(data)),
        ("Limits", _limits(data, ink)),
        ("pH through the train", _ph(data, ink)),
        ("Gas over the water", gas_lines(data)),
        ("Burden: what the doses add to the water, mg/L", _burden(data)),
        ("Sludge", _sludge(data)),
        ("Separators to choose from", separator_lines(data)),
        ("Cautions", bullets(data["cautions"])),
        ("Assumptions", bullets(data["assumptions"])),
        ("Proof", proof_lines(data)),
        ("Runners-up", runners_up_lines(data)),
        ("Made with", _versions(data)),
    )
    for heading, body in sections:
        if body:
            lines += ["", ink.heading(heading), *body]
    return "\n".join(lines) + "\n"


def _summary(data: Data, ink: Ink) -> list[str]:
    site = data["site"]
    lines = paragraph(
        f"{flow(site['flow_m3_per_d'])} m3/d on {given(site['operating_days_per_year'])} days a "
        f"year; the analysis stands for the {site['stands_for']}; "
        f"{given(site['temperature_degc'])} C; activity model: {site['activity_model']}."
    )
    missed = [_limit_name(limit) for limit in data["limits"] if not limit["meets"]]
    if data["limits"] and not missed:
        tight = min(data["limits"], key=lambda limit: float(limit["margin_percent"]))
        lines += paragraph(
            f"Every limit is met. The tightest is {_limit_name(tight)}: "
            f"{number(tight['predicted'])} {tight['unit']} predicted against a target of "
            f"{number(tight['target'])} and a limit of {given(tight['limit'])}."
        )
    failures = [f"Limits missed: {', '.join(missed)}."] if missed else []
    if not data["ph"]["meets"]:
        failures.append(f"Window missed: {_ph_sentence(data['ph'])}")
    failures += [f"Rule missed: {rule.rstrip('.')}." for rule in data["rules_missed"]]
    return lines + [ink.bad(line) for text in failures for line in paragraph(text)]


def _set_points(data: Data) -> list[str]:
    names = _names(data)
    lines = []
    for point in data["set_points"]:
        stage, ph = str(point["stage"]).capitalize(), f"{point['ph_set_point']:.2f}"
        alarms = f"alarm below {point['ph_alarm_low']:.2f} and above {point['ph_alarm_high']:.2f}"
        if point["controller"]:
            driven = names.get(point["controller"], point["controller"])
            lines += paragraph(f"{stage}: pH {ph}, {alarms}; the pH controller drives {driven}.")
        else:
            lines += paragraph(f"{stage}: no pH controller; the doses bring pH {ph}, {alarms}.")
    for feed in data["feeding"]:
        if feed["paced_by"] == "flow":
            lines += paragraph(
                f"{_feed_name(feed).capitalize()}: {number(feed['dose_mg_per_l'], _DOSE_DIGITS)} "
                f"mg/L in proportion to the flow, alarm below "
                f"{number(feed['alarm_low_mg_per_l'], _DOSE_DIGITS)} and above "
                f"{number(feed['alarm_high_mg_per_l'], _DOSE_DIGITS)} mg/L."
            )
    return lines or paragraph("Nothing is dosed.")


def _feeding(data: Data) -> list[str]:
    rows = [
        [
            _feed_name(feed),
            str(feed["product"]),
            number(feed["dose_mg_per_l"], _DOSE_DIGITS),
            number(feed["pure_kg_per_d"]),
            number(feed["product_kg_per_d"]),
            number(feed["product_l_per_h"]),
            str(feed["paced_by"]),
        ]
        for feed in data["feeding"]
    ]
    if not rows:
        return []
    headers = ["reagent", "product as delivered", "mg/L\npure", "kg/d\npure", "kg/d\nproduct",
               "L/h\nproduct", "paced by"]  # fmt: skip
    return table(headers, rows, text_columns=(0, 1, 6))


def _purchases(data: Data) -> list[str]:
    other = any(buy.get("other_per_year") for buy in data["purchases"])
    rows = [
        [
            str(buy["offer"]),
            str(buy["supplier"]),
            str(buy["product"]),
            number(buy["used_t_per_year"]),
            number(buy["bought_t_per_year"]),
            number(buy["surplus_t_per_year"]),
            money(buy["goods_per_year"]),
            money(buy["freight_per_year"]),
            *([money(buy.get("other_per_year", 0.0))] if other else []),
        ]
        for buy in data["purchases"]
    ]
    if not rows:
        return []
    currency = data["site"]["currency"]
    headers = ["offer", "supplier", "product", "used\nt/year", "bought\nt/year", "surplus\nt/year",
               f"goods\n{currency}/year", f"freight\n{currency}/year",
               *([f"other\n{currency}/year"] if other else [])]  # fmt: skip
    return table(headers, rows, text_columns=(0, 1, 2))


def _cost(data: Data) -> list[str]:
    cost = dict(data["cost"])
    total = cost.pop("total")
    names = _names(data)
    rows = [
        [names.get(cause, cause), money(value), _percent(100.0 * value / total if total else 0.0)]
        for cause, value in cost.items()
        if value
    ]
    rows.append(["total", money(total), ""])
    return table(["cause", "a year", "share"], rows, last_is_total=True)


def _limits(data: Data, ink: Ink) -> list[str]:
    rows = [
        [
            str(limit["parameter"]),
            str(limit["averaging"]),
            f"{given(limit['limit'])} {limit['unit']}",
            number(limit["residual"]),
            number(limit["carry_over"]),
            number(limit["floor"]),
            number(limit["variability_factor"], 2),
            number(limit["predicted"]),
            number(limit["target"]),
            _percent(limit["margin_percent"]) if limit["meets"] else _MISSED,
        ]
        for limit in data["limits"]
    ]
    if not rows:
        return paragraph("No limit applies.")
    headers = ["what", "period", "limit", "residual", "carry-\nover", "floor", "factor",
               "predicted", "target", "below\nlimit"]  # fmt: skip
    lines = table(headers, rows, text_columns=(0, 1))
    lines = [_verdict_colour(line, ink) for line in lines]
    lines += paragraph(
        "Residual: what stays dissolved. Carry-over: metal in solids that slip past the separator. "
        "Floor: the least value promised without a jar test of this water. Factor: from the value "
        "of the analysis to that of the period. Target: the limit less its design margin."
    )
    lines += theory_lines(data["limits"])
    lines += _held_up(data["limits"])
    lines += _grouped("Worst case", data["limits"], "worst_state", plain=True)
    lines += _grouped("Source of the limit", data["limits"], "source")
    return lines


def _held_up(limits: Sequence[Data]) -> list[str]:
    """What holds up the metals of which more stays dissolved than slips past the separator."""
    held = {
        str(limit["parameter"]): limit["held_up_by"]["text"]
        for limit in limits
        if limit.get("held_up_by") and limit["residual"] > limit["carry_over"]
    }
    if not held:
        return []
    text = "; ".join(f"{name} as {species}" for name, species in held.items())
    return paragraph(f"Held in solution: {text}.", indent=INDENT * 2, first=INDENT)


def _verdict_colour(line: str, ink: Ink) -> str:
    if line.endswith(_MISSED):
        return line.removesuffix(_MISSED) + ink.bad(_MISSED)
    return line


def _grouped(title: str, limits: Sequence[Data], key: str, *, plain: bool = False) -> list[str]:
    """One line per different text, naming the limits that share it; ``plain`` ids as words."""
    groups: dict[str, list[str]] = {}
    for limit in limits:
        text = str(limit[key] or "").replace("_", " " if plain else "_")
        if text:
            names = groups.setdefault(text, [])
            name = str(limit["parameter"])
            if name not in names:
                names.append(name)
    everything = len(groups) == 1
    lines = []
    for text, names in groups.items():
        whom = "" if everything and len(names) > 1 else f" ({', '.join(names)})"
        lines += paragraph(f"{title}{whom}: {text.rstrip('.')}.", indent=INDENT * 2, first=INDENT)
    return lines


def _ph_sentence(ph: Data) -> str:
    word = "inside" if ph["meets"] else "NOT inside"
    return (
        f"pH at discharge {ph['lowest']:.2f} to {ph['highest']:.2f} over every state checked, "
        f"{word} its window of {ph['low']:.2f} to {ph['high']:.2f}."
    )


def _ph(data: Data, ink: Ink) -> list[str]:
    rows = [
        [
            str(water["point"]),
            f"{water['ph']:.2f}",
            number(water["ionic_strength_mol_per_l"]),
            number(water["tds_mg_per_l"]),
            number(water["h2s_ppm"], 2),
        ]
        for water in data["water"]
    ]
    headers = ["point", "pH", "ionic strength\nmol/L", "TDS\nmg/L", "H2S over it\nppm"]
    sentence = paragraph(_ph_sentence(data["ph"]))
    if not data["ph"]["meets"]:
        sentence = [ink.bad(line) for line in sentence]
    return [*(table(headers, rows) if rows else []), *sentence]


def _burden(data: Data) -> list[str]:
    rows = [
        [
            str(name),
            number(row["feed_mg_per_l"]),
            number(_without_noise(row["added_mg_per_l"], row["feed_mg_per_l"])),
            number(row["effluent_mg_per_l"]),
        ]
        for name, row in data["burden"].items()
        if any(row.values())
    ]
    return table(["what", "feed", "added", "effluent"], rows) if rows else []


def _without_noise(difference: float, of: float) -> float:
    """Zero where a difference is only rounding of the value it was taken from."""
    return 0.0 if abs(difference) <= _ROUNDING * abs(of) else difference


def _sludge(data: Data) -> list[str]:
    sludge = data["sludge"]
    solids = sorted(
        sludge["dry_kg_per_d_by_solid"].items(), key=lambda item: -float(item[1])
    )  # fmt: skip
    rows = [[str(name), number(value)] for name, value in solids if value]
    rows += [
        [name, number(value)]
        for name, value in (
            ("reagent left unreacted", sludge["unreacted_kg_per_d"]),
            ("solids of the feed", sludge["feed_solids_kg_per_d"]),
        )
        if value
    ]
    text = (
        f"{number(sludge['dry_t_per_year'])} t dry, {number(sludge['wet_t_per_year'])} t wet a "
        f"year. Class: {sludge['sludge_class']}"
    )
    text += f"; rule: {sludge['rule'].rstrip('.')}." if sludge["rule"] else "."
    return [*(table(["solid", "kg/d dry"], rows) if rows else []), *paragraph(text)]


def _versions(data: Data) -> list[str]:
    return paragraph(", ".join(f"{name} {version}" for name, version in data["versions"].items()))


def _names(data: Data) -> dict[str, str]:
    """Dose keys and reagent ids as people call them."""
    names = {str(feed["key"]): _feed_name(feed) for feed in data["feeding"]}
    reagents = {str(feed["reagent"]): _plain_key(str(feed["reagent"])) for feed in data["feeding"]}
    return {**reagents, **{key: _plain_key(key) for key in data["doses"]}, **names}


def _feed_name(feed: Data) -> str:
    name = str(feed["reagent"]).replace("_", " ")
    stage = str(feed["key"]).partition("@")[2]
    return f"{name} ({stage})" if stage else name


def _plain_key(key: str) -> str:
    reagent, _, stage = key.replace("_", " ").partition("@")
    return f"{reagent} ({stage})" if stage else reagent


def _limit_name(limit: Data) -> str:
    return f"{limit['parameter']} ({limit['averaging']})"


def _percent(value: float) -> str:
    return f"{value:.1f} %" if abs(value) < 10.0 else f"{value:.0f} %"
