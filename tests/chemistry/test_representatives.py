"""Few waters stand for many samples: volume and loads are kept, extremes are kept as they are."""

from __future__ import annotations

import datetime

import numpy as np
import pytest

from catalogs.constants import load_system
from chemistry import representatives as module
from chemistry.representatives import extreme_samples, representatives
from chemistry.sample_gaps import complete_samples
from chemistry.sample_waters import SampleWaters, close_samples
from chemistry.samples import Reported, SampleDefaults, SampleRecord, Samples

COMPONENTS = ("H+", "Na+", "SO4-2", "CO3-2", "Cu+2", "Zn+2", "Ni+2")
METALS = ("Cu", "Zn", "Ni")


def year(count: int, seed: int = 3) -> Samples:
    """Three modes of an invented works, seeded."""
    rng = np.random.default_rng(seed)
    modes = np.array([[40.0, 5.0, 2.0], [3.0, 60.0, 2.0], [8.0, 8.0, 30.0]])
    records = []
    for i in range(count):
        levels = modes[i % 3] * np.exp(rng.normal(0.0, 0.3, 3))
        amounts = {name: Reported(value=float(v)) for name, v in zip(METALS, levels, strict=True)}
        amounts["SO4"] = Reported(value=float(rng.uniform(500, 900)))
        records.append(
            SampleRecord(
                day=datetime.date(2024, 1, 1) + datetime.timedelta(days=i),
                flow_m3_per_d=float(rng.uniform(50, 200)), ph=float(rng.uniform(2.2, 3.5)),
                dissolved=amounts, total=amounts,
            )
        )  # fmt: skip
    return complete_samples(records, SampleDefaults(close_charge_with="SO4", temperature_degc=25.0))


@pytest.fixture(scope="module")
def many() -> tuple[Samples, SampleWaters]:
    samples = year(180)
    return samples, close_samples(samples, load_system(25.0, components=COMPONENTS))


def test_shares_add_up_to_the_volume_and_every_sample_is_in_one_group(
    many: tuple[Samples, SampleWaters],
) -> None:
    found = representatives(*many, most=20)
    assert found.share.sum() == pytest.approx(1.0, abs=1e-14)
    assert sorted(i for group in found.members for i in group) == list(range(180))
    flows = np.array([s.flow_m3_per_d for s in many[0].samples])
    for group, share in zip(found.members, found.share, strict=True):
        assert share == pytest.approx(flows[list(group)].sum() / flows.sum(), rel=1e-12)


def test_the_load_of_every_component_is_that_of_all_samples(
    many: tuple[Samples, SampleWaters],
) -> None:
    samples, waters = many
    found = representatives(samples, waters, most=20)
    whole = np.array(samples.weights) @ waters.totals_mol_per_l
    assert found.share @ found.totals_mol_per_l == pytest.approx(whole, rel=1e-12)


def test_every_extreme_is_kept_as_it_is(many: tuple[Samples, SampleWaters]) -> None:
    samples, waters = many
    found = representatives(samples, waters, most=20)
    flows = np.array([s.flow_m3_per_d for s in samples.samples])
    single = {group[0] for group in found.members if len(group) == 1}
    for values in (waters.ph, -waters.ph, flows):
        assert int(np.argmax(values)) in single
    for name in ("Cu+2", "Zn+2", "Ni+2"):
        column = waters.totals_mol_per_l[:, waters.system.index[name]]
        assert int(np.argmax(column)) in single
        assert found.totals_mol_per_l[:, waters.system.index[name]].max() == column.max()
    reasons = {reason for kept in found.reasons for reason in kept}
    assert {"highest alkali demand", "highest load of metals", "lowest flow"} <= reasons


def test_alkali_demand_ranks_like_the_equilibrium(many: tuple[Samples, SampleWaters]) -> None:
    from chemistry.closure import base_demand_mol_per_l

    samples, waters = many
    kept = extreme_samples(samples, waters)
    (highest,) = [i for i, why in kept.items() if "highest alkali demand" in why]
    sodium = load_system(25.0, components=COMPONENTS)
    others = [highest, *range(0, 180, 20)]
    demands = [base_demand_mol_per_l(sodium, waters.totals_mol_per_l[i], 9.0) for i in others]
    assert demands[0] == max(demands)


def test_the_same_samples_give_the_same_waters(many: tuple[Samples, SampleWaters]) -> None:
    first, second = representatives(*many, most=20), representatives(*many, most=20)
    assert first.members == second.members


def test_modes_of_the_works_are_not_mixed(many: tuple[Samples, SampleWaters]) -> None:
    found = representatives(*many, most=30)
    mixed = [group for group in found.members if len({i % 3 for i in group}) > 1]
    assert sum(len(group) for group in mixed) < 0.1 * 180


def test_few_samples_stand_for_themselves() -> None:
    samples = year(8)
    waters = close_samples(samples, load_system(25.0, components=COMPONENTS))
    found = representatives(samples, waters)
    assert found.members == tuple((i,) for i in range(8))
    assert found.totals_mol_per_l == pytest.approx(waters.totals_mol_per_l)


def test_equal_samples_are_one_water() -> None:
    samples = year(1)
    same = Samples(source="", samples=samples.samples * 30)
    waters = close_samples(same, load_system(25.0, components=COMPONENTS))
    found = representatives(same, waters, most=10)
    assert found.share.sum() == pytest.approx(1.0)
    assert found.totals_mol_per_l.min(axis=0) == pytest.approx(waters.totals_mol_per_l[0])


def test_very_many_samples_go_by_k_means_and_keep_loads_too(
    many: tuple[Samples, SampleWaters], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(module, "MOST_FOR_WARD", 50)
    samples, waters = many
    found = representatives(samples, waters, most=25)
    assert 12 < len(found.members) <= 25
    whole = np.array(samples.weights) @ waters.totals_mol_per_l
    assert found.share @ found.totals_mol_per_l == pytest.approx(whole, rel=1e-12)
    assert found.members == representatives(samples, waters, most=25).members
