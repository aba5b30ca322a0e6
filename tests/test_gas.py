"""The laws of hot gas against the abstract they rest on."""

from __future__ import annotations

import numpy as np
import pytest

from embersift.bands import SOFT
from embersift.laws.declaration import BackgroundLaw, Host
from embersift.laws.gas import GAS


def host(sfr: list[float]) -> Host:
    values = np.array(sfr)
    return Host(np.full(values.shape, 1e9), values, np.full(values.shape, 8.2), 0.0 * values)


@pytest.mark.parametrize("law", GAS.values(), ids=lambda law: law.name)
def test_law_gives_its_declared_check_values(law: BackgroundLaw) -> None:
    assert law.checks
    for check in law.checks:
        got = law.formula(host([check.inputs["sfr"]]), law.values)
        assert set(got) == law.light == {"gas"}
        assert float(got["gas"][0]) == pytest.approx(check.expected, rel=check.rtol)
    assert law.kind == "gas"
    assert law.band == SOFT


def test_thermal_part_is_the_diffuse_light_less_its_faint_compact_sources() -> None:
    # abstract of Mineo, Gilfanov & Sunyaev 2012b: 8.3e38 SFR, of which 30-40 % compact sources
    law = GAS["mineo2012gas"]
    per_sfr = float(law.formula(host([1.0]), law.values)["gas"][0])
    assert 0.60 * 8.3e38 <= per_sfr <= 0.70 * 8.3e38


def test_gas_follows_star_formation_and_nothing_else() -> None:
    law = GAS["mineo2012gas"]
    light = law.formula(host([0.0, 1.0, 17.0, np.nan]), law.values)["gas"]
    assert light[0] == 0.0
    assert light[2] == pytest.approx(17.0 * light[1], rel=1e-14)
    assert np.isnan(light[3])
    assert not law.needs_oh12


def test_row_is_marked_outside_the_sample() -> None:
    # abstract: SFR 0.1 to 17 Msun/yr, M* 3e8 to 6e10 Msun
    law = GAS["mineo2012gas"]
    mark = law.stretched(
        sfr=np.array([0.09, 0.1, 17.0, 18.0, 1.0, 1.0]),
        mstar=np.array([1e9, 1e9, 1e9, 1e9, 2e8, 7e10]),
    )
    np.testing.assert_array_equal(mark, [True, False, False, True, True, True])


def test_no_gas_is_dark_whatever_the_galaxy() -> None:
    law = GAS["none"]
    np.testing.assert_array_equal(law.formula(host([0.0, 100.0, np.nan]), law.values)["gas"], 0.0)
    assert law.status == "PRACTICE"
    assert not law.ranges


def test_what_is_from_memory_says_so() -> None:
    law = GAS["mineo2012gas"]
    assert law.status == law.coefficients["per_sfr"].status == law.scatter_status == "MEM"
    assert "memory" in law.status_note
    assert law.apparent
