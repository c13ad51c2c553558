"""Combined wastestream formula: a categorical limit where process water meets other streams.

Owns the formula and its inverse; reading the streams is `optimiser.site_combined_flow`.

Notes
-----
Regulated streams ``i`` (flow ``F_i``, categorical limit ``C_i``), a total flow ``F_T`` and dilute
streams ``F_D`` (boiler blowdown, cooling water that touches nothing, stormwater, sanitary water)
have the alternative limit

    C_T = (sum C_i F_i / sum F_i) (F_T - F_D) / F_T

at the point where they are together. Streams that no category regulates count in ``F_T`` alone, as
if they held the limit of the regulated ones.

References
----------
40 CFR 403.6(e)(1)(i), alternative concentration limit; 403.6(d), dilution is no substitute for
treatment; 403.6(e)(2), no alternative limit below the detection limit. From memory.
"""

from __future__ import annotations

from collections.abc import Sequence


def alternative_limit_mg_per_l(
    regulated: Sequence[tuple[float, float]], *, total_m3_per_d: float, dilute_m3_per_d: float
) -> float:
    """Limit of the combined stream. [mg/L]

    Parameters
    ----------
    regulated
        Flow and categorical limit of each regulated stream. [m3/d, mg/L]
    total_m3_per_d, dilute_m3_per_d
        Flow of all streams, and of the dilute ones among them. [m3/d]

    Raises
    ------
    ValueError
        Flows that cannot be: no regulated flow, or more regulated and dilute flow than in total.

    Examples
    --------
    60 m3/d at 2.0 and 30 at 0.5 mg/L with 20 unregulated and 40 dilute: 1.5 x 110 / 150.

    >>> alternative_limit_mg_per_l([(60, 2.0), (30, 0.5)], total_m3_per_d=150, dilute_m3_per_d=40)
    1.1
    """
    flow = sum(f for f, _ in regulated)
    if flow <= 0.0 or min(dilute_m3_per_d, *(f for f, _ in regulated)) < 0.0:
        raise ValueError("a regulated flow above 0 and no negative flow")
    if flow + dilute_m3_per_d > total_m3_per_d * (1.0 + 1e-9):
        raise ValueError("regulated and dilute flow at most the total flow")
    mean = sum(f * limit for f, limit in regulated) / flow
    return mean * (total_m3_per_d - dilute_m3_per_d) / total_m3_per_d


def treated_ceiling_mg_per_l(
    alternative_mg_per_l: float, treated_m3_per_d: float, others: Sequence[tuple[float, float]]
) -> float:
    """Concentration of a treated stream that meets a limit after other streams have joined. [mg/L]

    Parameters
    ----------
    alternative_mg_per_l
        Limit of the combined stream.
    treated_m3_per_d
        Flow of the treated stream.
    others
        Flow and concentration of each stream that joins it. [m3/d, mg/L]

    Returns
    -------
    float
        Zero or less where the others use the limit up.

    Examples
    --------
    >>> treated_ceiling_mg_per_l(1.1, 60, [(30, 0.4), (20, 0.1), (40, 0.0)])
    2.5166666666666666
    """
    total = treated_m3_per_d + sum(f for f, _ in others)
    brought = sum(f * mg_per_l for f, mg_per_l in others)
    return (alternative_mg_per_l * total - brought) / treated_m3_per_d
