"""The bolometric corrections against their tables and what any correction must obey."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from embersift.errors import LawError
from embersift.laws.bolometric import BOLOMETRIC
from embersift.laws.declaration import Array, BolometricLaw, Check, Coefficients

LSUN = 3.828e33  # erg/s, IAU 2015 resolution B3
EDDINGTON = 1.257e38  # erg/s per Msun
LAWS = tuple(BOLOMETRIC.values())
PUBLISHED = tuple(law for law in LAWS if law.name != "constant")
TWO_BANDS = tuple(law for law in PUBLISHED if law.soft_coefficients)


def values_of(law: BolometricLaw, band: str) -> Coefficients:
    if law.name == "constant":
        return {"k": 12.0}
    return law.values if band == "hard" else law.soft_values


def k_of(law: BolometricLaw, lbol: Array, band: str = "hard", mbh: float = 1e5) -> Array:
    mass = np.full(lbol.shape, mbh)
    return law.formula(lbol, lbol / (EDDINGTON * mass), mass, values_of(law, band))


def k_at(name: str, lbol: float, band: str = "hard") -> float:
    return float(k_of(BOLOMETRIC[name], np.array([lbol]), band)[0])


@pytest.mark.parametrize(
    ("law", "check"),
    [
        pytest.param(law, check, id=f"{law.name}-{number}")
        for law in LAWS
        for number, check in enumerate(law.checks)
    ],
)
def test_law_gives_its_declared_check_values(law: BolometricLaw, check: Check) -> None:
    lbol, ratio, mbh = (
        np.array([check.inputs.get(name, np.nan)]) for name in ("lbol", "eddington_ratio", "mbh")
    )
    k = law.formula(lbol, ratio, mbh, values_of(law, check.inputs["band"]))
    assert check.quantity == "k"
    assert float(k[0]) == pytest.approx(check.expected, rel=check.rtol)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_law_says_what_it_is(law: BolometricLaw) -> None:
    assert BOLOMETRIC[law.name] is law
    assert law.summary
    assert law.formula_text
    assert law.outside
    if law.name != "constant":
        assert law.source.citation
        assert law.checks
    declared = (*law.coefficients.values(), *law.soft_coefficients.values())
    statuses = {law.status, law.source.status, *(c.status for c in declared)}
    statuses |= {c.error_status for c in declared} | {span.status for span in law.ranges}
    if "MEM" in statuses:
        assert law.status_note


# Coefficient sheet, section 1.10 (CALC): k by log Lbol [erg/s]. Marconi and Lusso stand there
# as written, so only the rows inside their ranges are compared.
TABLE = {
    ("marconi2004", "hard"): {42: 8.001, 43: 10.62, 44: 15.71, 45: 25.38, 46: 43.86},
    ("marconi2004", "soft"): {42: 12.16, 43: 15.4, 44: 21.77, 45: 33.58, 46: 55.43},
    ("hopkins2007", "hard"): {
        38: 8.159, 39: 8.073, 40: 8.246, 41: 8.896, 42: 10.44,
        43: 13.68, 44: 20.14, 45: 32.7, 46: 56.89, 47: 103.2,
    },
    ("hopkins2007", "soft"): {
        38: 13.46, 39: 13.32, 40: 13.6, 41: 14.68, 42: 17.23,
        43: 22.57, 44: 33.22, 45: 53.95, 46: 93.87, 47: 170.3,
    },
    ("shen2020", "hard"): {
        38: 6.043, 39: 6.029, 40: 6.319, 41: 7.166, 42: 9.052,
        43: 12.89, 44: 20.43, 45: 34.95, 46: 62.72, 47: 115.6,
    },
    ("shen2020", "soft"): {
        38: 8.475, 39: 8.455, 40: 8.862, 41: 10.05, 42: 12.69,
        43: 18.08, 44: 28.65, 45: 49.02, 46: 87.96, 47: 162.1,
    },
    ("duras2020", "hard"): {
        38: 10.96, 39: 10.96, 40: 10.96, 41: 10.96, 42: 10.98,
        43: 11.12, 44: 11.94, 45: 15.97, 46: 33.29, 47: 99.55,
    },
    ("duras2020-type1", "hard"): {
        38: 12.76, 39: 12.76, 40: 12.76, 41: 12.76, 42: 12.77,
        43: 12.87, 44: 13.47, 45: 16.73, 46: 31.95, 47: 94.96,
    },
    ("duras2020-type2", "hard"): {
        38: 10.85, 39: 10.85, 40: 10.85, 41: 10.85, 42: 10.86,
        43: 10.95, 44: 11.61, 45: 15.6, 46: 36.18, 47: 129.4,
    },
    ("lusso2012-type1", "hard"): {45: 15.11, 46: 27.98},
    ("lusso2012-type1", "soft"): {45: 20.82, 46: 35.1},
    ("lusso2012-type2", "hard"): {44: 10.31, 45: 13.76},
    ("lusso2012-type2", "soft"): {44: 13.11, 45: 18.95},
}  # fmt: skip


@pytest.mark.parametrize(("name", "band"), TABLE)
def test_law_matches_the_table_side_by_side(name: str, band: str) -> None:
    rows = TABLE[name, band]
    lbol = 10.0 ** np.array(list(rows), dtype=float)
    np.testing.assert_allclose(
        k_of(BOLOMETRIC[name], lbol, band), np.array(list(rows.values())), rtol=6e-4
    )


@pytest.mark.parametrize(
    ("name", "x", "gamma"),
    # coefficient sheet, section 1.11 (CALC): photon index implied by the two bands
    [
        ("hopkins2007", 10.0, 1.766),
        ("shen2020", 10.0, 1.874),
        ("marconi2004", 12.0, 1.931),
        ("lusso2012-type1", 12.0, 1.90),
        ("lusso2012-type2", 12.0, 1.88),
    ],
)
def test_two_bands_imply_one_photon_index(name: str, x: float, gamma: float) -> None:
    # unabsorbed power law: L(0.5-2) / L(2-10)
    p = 2.0 - gamma
    soft_over_hard = (2.0**p - 0.5**p) / (10.0**p - 2.0**p)
    lbol = LSUN * 10.0**x
    assert k_at(name, lbol) / k_at(name, lbol, "soft") == pytest.approx(soft_over_hard, rel=0.01)


@pytest.mark.parametrize(
    ("log_lx", "log_lbol"),
    # coefficient sheet, section 1.5 (CALC): inverse of Duras et al. 2020, general K(Lbol)
    [(40, 41.040), (42, 43.047), (44, 45.268), (45, 46.996)],
)
def test_duras2020_inverts_as_the_sheet_says(log_lx: float, log_lbol: float) -> None:
    lx = 10.0**log_lbol / k_at("duras2020", 10.0**log_lbol)
    assert math.log10(lx) == pytest.approx(log_lx, abs=6e-4)


@pytest.mark.parametrize(
    ("name", "k", "lx"),
    # coefficient sheet, section 2.10 (CALC): Lbol = 5.663e41 erg/s. Marconi stands there as
    # written; its x = 8.17 is inside the range
    [
        ("duras2020", 10.97, 5.161e40),
        ("hopkins2007", 9.94, 5.695e40),
        ("shen2020", 8.45, 6.702e40),
        ("marconi2004", 7.61, 7.446e40),
    ],
)
def test_worked_chain_of_the_sheet(name: str, k: float, lx: float) -> None:
    assert k_at(name, 5.663e41) == pytest.approx(k, abs=6e-3)
    assert 5.663e41 / k_at(name, 5.663e41) == pytest.approx(lx, rel=3e-4)


def test_safe_laws_agree_in_the_dwarf_regime() -> None:
    # coefficient sheet, section 0 (CALC): a factor 1.8 at 1e38-1e41 erg/s, 0.08 dex at 1e42
    names = ("duras2020", "shen2020", "hopkins2007")
    for log_lbol, factor in ((38, 1.83), (39, 1.83), (40, 1.83), (41, 1.83), (42, 10**0.085)):
        k = [k_at(name, 10.0**log_lbol) for name in names]
        assert max(k) / min(k) < factor


def test_duras2020_takes_solar_luminosities_not_erg() -> None:
    # fed with log(erg/s) the formula gives 5.8e10 at 1e42 erg/s (coefficient sheet, section 0)
    assert k_at("duras2020", 1e42) == pytest.approx(10.98, abs=6e-3)


@pytest.mark.parametrize(
    ("name", "low", "high"),
    [("marconi2004", 8.0, 13.0), ("lusso2012-type1", 10.8, 13.2), ("lusso2012-type2", 9.8, 12.2)],
)
@pytest.mark.parametrize("band", ["hard", "soft"])
def test_cubics_are_held_at_both_edges(name: str, low: float, high: float, band: str) -> None:
    law = BOLOMETRIC[name]
    for edge, beyond in ((low, (-1.0, 3.0, low - 0.5)), (high, (high + 0.5, 16.0))):
        held = k_at(name, LSUN * 10.0**edge, band)
        for x in beyond:
            assert k_at(name, LSUN * 10.0**x, band) == pytest.approx(held, rel=1e-12)
            assert law.stretched(lbol=np.array([LSUN * 10.0**x])).all()


def test_lusso2012_type1_is_held_next_to_its_minimum() -> None:
    # coefficient sheet, section 1.4 (CALC): minimum 13.6 at x = 10.83; 2e4 unheld at 1e40 erg/s
    assert k_at("lusso2012-type1", 1e40) == pytest.approx(13.6, abs=0.05)


@given(st.floats(42.9, 48.0))
@settings(max_examples=60, deadline=None)
def test_netzer2019_is_the_published_power_of_l_x(log_lbol: float) -> None:
    # Netzer 2019 gives k = 7 (L_X / 1e42)^0.3 in L_X; the law is asked with L_bol
    lbol = 10.0**log_lbol
    k = k_at("netzer2019", lbol)
    assert k == pytest.approx(7.0 * (lbol / k / 1e42) ** 0.3, rel=1e-12)


def test_netzer2019_is_held_where_the_power_law_would_fall_below_one() -> None:
    for lbol in (1e30, 1e38, 1e41, 7e42):
        assert k_at("netzer2019", lbol) == pytest.approx(7.0, rel=1e-12)
    marks = BOLOMETRIC["netzer2019"].stretched(lbol=np.array([6.9e42, 7e42, np.nan]))
    assert marks.tolist() == [True, False, False]


@pytest.mark.parametrize(
    ("ratio", "low", "high"),
    # Vasudevan & Fabian 2009, abstract: below 0.1, 0.1 to 0.2, from 0.2
    [
        (0.0, 15, 30),
        (0.0999, 15, 30),
        (0.1, 20, 70),
        (0.1999, 20, 70),
        (0.2, 70, 150),
        (5, 70, 150),
    ],
)
def test_vasudevan2009_stays_in_the_published_steps(ratio: float, low: float, high: float) -> None:
    law, one = BOLOMETRIC["vasudevan2009"], np.array([1e44])
    k = float(law.formula(one, np.array([ratio]), one, law.values)[0])
    assert low < k < high
    assert k / low == pytest.approx(high / k, rel=1e-12)  # the centre in log


@pytest.mark.parametrize(
    ("name", "floor"),
    # coefficient sheet, section 1.5: limits far below the rise
    [("duras2020", 10.96), ("duras2020-type1", 12.76), ("duras2020-type2", 10.85)],
)
@pytest.mark.parametrize("lbol", [0.0, 1e30, LSUN, np.nextafter(LSUN, 0.0), 1e38])
def test_duras2020_is_flat_down_to_nothing(name: str, floor: float, lbol: float) -> None:
    assert k_at(name, lbol) == pytest.approx(floor, rel=1e-6)


@pytest.mark.parametrize(
    ("name", "floor"), [("duras2020-mass", 16.75), ("duras2020-eddington", 7.51)]
)
def test_other_forms_of_duras2020_are_flat_too(name: str, floor: float) -> None:
    law, zero = BOLOMETRIC[name], np.zeros(1)
    assert float(law.formula(zero, zero, zero, law.values)[0]) == pytest.approx(floor, rel=1e-12)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
@given(
    log_lbol=st.lists(st.floats(30.0, 50.0), min_size=1, max_size=20),
    log_mbh=st.floats(0.0, 10.5),
)
@settings(max_examples=60, deadline=None)
def test_k_is_finite_and_never_below_one(
    law: BolometricLaw, log_lbol: list[float], log_mbh: float
) -> None:
    # k below 1 would put more light into X-rays than there is
    lbol = 10.0 ** np.array(log_lbol)
    for band in ("hard", "soft") if law.soft_coefficients else ("hard",):
        k = k_of(law, lbol, band, 10.0**log_mbh)
        assert k.shape == lbol.shape
        assert np.all(np.isfinite(k))
        assert np.all(k >= 1.0)


@pytest.mark.parametrize(
    "law", [law for law in LAWS if law.name != "vasudevan2009"], ids=lambda law: law.name
)
@given(
    log_lbol=st.lists(st.floats(30.0, 50.0), min_size=2, max_size=20),
    log_mbh=st.floats(0.0, 10.5),
)
@settings(max_examples=60, deadline=None)
def test_brighter_black_hole_is_never_fainter_in_x_rays(
    law: BolometricLaw, log_lbol: list[float], log_mbh: float
) -> None:
    lbol = 10.0 ** np.sort(np.array(log_lbol))
    for band in ("hard", "soft") if law.soft_coefficients else ("hard",):
        lx = lbol / k_of(law, lbol, band, 10.0**log_mbh)
        assert all(b >= a * (1.0 - 1e-12) for a, b in pairwise(lx.tolist()))


def test_vasudevan2009_alone_dims_where_a_step_is_crossed() -> None:
    below, above = (ratio * EDDINGTON * 1e5 for ratio in (0.199, 0.201))
    assert above / k_at("vasudevan2009", above) < below / k_at("vasudevan2009", below)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_dormant_gives_no_x_rays_and_missing_stays_missing(law: BolometricLaw) -> None:
    lbol = np.array([0.0, np.nan])
    before = lbol.copy()
    lx = lbol / k_of(law, lbol)
    assert lx[0] == 0.0
    assert np.isnan(lx[1])
    np.testing.assert_array_equal(lbol, before)  # the caller's array is left alone


@pytest.mark.parametrize("name", ["vasudevan2009", "duras2020-eddington", "duras2020-mass"])
def test_missing_mass_leaves_k_missing_where_it_is_needed(name: str) -> None:
    law, missing = BOLOMETRIC[name], np.array([np.nan])
    assert np.isnan(law.formula(np.array([1e42]), missing, missing, law.values)[0])


def test_constant_law_has_no_value_of_its_own() -> None:
    law, one = BOLOMETRIC["constant"], np.array([1e42])
    with pytest.raises(LawError, match=r"agn\.k"):
        law.formula(one, one, one, law.values)
    assert law.formula(one, one, one, {"k": 16.0}).tolist() == [16.0]


@pytest.mark.parametrize("law", [law for law in LAWS if law not in TWO_BANDS], ids=lambda x: x.name)
def test_hard_only_law_refuses_the_soft_band(law: BolometricLaw) -> None:
    with pytest.raises(LawError, match="2-10 keV only"):
        _ = law.soft_values


def test_lopez2024_marks_rows_outside_its_nuclei() -> None:
    # Lopez et al. 2024: about 1e38 to 1e43 erg/s
    marks = BOLOMETRIC["lopez2024"].stretched(lbol=np.array([9e37, 1e40, 2e43]))
    assert marks.tolist() == [True, False, True]


@pytest.mark.parametrize("law", PUBLISHED, ids=lambda law: law.name)
def test_every_published_law_marks_what_it_was_not_made_for(law: BolometricLaw) -> None:
    # a black hole of a dwarf, at the faint end: none of these was calibrated there
    faint = {"lbol": np.array([1e37]), "mbh": np.array([1e4]), "eddington_ratio": np.array([1e-5])}
    assert law.stretched(**faint).all()
