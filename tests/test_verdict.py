"""Fates, against a slow reading of the contract (design, section 4.6-4.7) row by row."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from embersift.verdict import CRITERIA, FATES, fate_code, judge, judge_thresholds

GOOD = {
    "usable": True, "has_hole": True, "accreting": True, "flux_counted": 1e-15,
    "lx_agn": 1e41, "excess": 10.0, "blended": False,
}  # fmt: skip
LIMITS = {"flux_limit": 1e-16, "floor": 1e39, "threshold": 2.0}


def fate(**changes):
    row = GOOD | {k: v for k, v in changes.items() if k in GOOD}
    limits = LIMITS | {k: v for k, v in changes.items() if k in LIMITS}
    return FATES[judge(**{k: np.array([v]) for k, v in row.items()}, **limits)[0]]


def test_fates_are_nineteen_and_blended_comes_last_in_their_names():
    assert len(FATES) == len(set(FATES)) == 19
    assert FATES[:4] == ("unusable", "no_black_hole", "dormant", "visible")
    assert FATES[3 + 7] == "faint+underfloor+outshone"
    assert FATES[3 + 15] == "faint+underfloor+outshone+blended"
    for code, name in enumerate(FATES[4:], start=4):
        parts = name.split("+")
        assert parts == sorted(parts, key=CRITERIA.index)
        assert code - 3 == sum(1 << CRITERIA.index(part) for part in parts)


def test_code_and_name_are_inverse():
    assert [fate_code(name) for name in FATES] == list(range(19))
    with pytest.raises(KeyError):
        fate_code("hidden")


# few values, so that equality, NaN and infinity all happen often
FLUX = st.sampled_from([0.0, 1e-17, 1e-16, 1e-15, np.nan, np.inf])
LX = st.sampled_from([0.0, 1e38, 1e39, 1e41, np.nan, np.inf])
EXCESS = st.sampled_from([0.0, 0.5, 1.0, 2.0, 5.0, np.inf, np.nan])
ROW = st.tuples(st.booleans(), st.booleans(), st.booleans(), FLUX, LX, EXCESS, st.booleans())


def slow_fate(row, flux_limit, floor, threshold):
    """The contract read aloud, one row at a time."""
    usable, has_hole, accreting, flux, lx, excess, blended = row
    if not usable:
        return "unusable"
    if not has_hole:
        return "no_black_hole"
    if not accreting:
        return "dormant"
    if flux != flux or lx != lx or excess != excess or flux == np.inf or lx == np.inf:
        return "unusable"  # the chain promised numbers; a row it cannot judge is not visible
    failed = []
    if not flux >= flux_limit:
        failed.append("faint")
    if floor > 0 and not lx >= floor:
        failed.append("underfloor")
    if not excess >= threshold:
        failed.append("outshone")
    if blended:
        failed.append("blended")
    return "+".join(failed) or "visible"


@settings(max_examples=300, deadline=None)
@given(
    rows=st.lists(ROW, max_size=20),
    flux_limit=st.sampled_from([0.0, 1e-16, np.inf]),
    floor=st.sampled_from([0.0, 1e39]),
    thresholds=st.lists(st.sampled_from([0.5, 1.0, 2.0, 5.0]), min_size=1, max_size=3),
)
def test_fates_are_those_of_the_contract(rows, flux_limit, floor, thresholds):
    names = ("usable", "has_hole", "accreting", "flux_counted", "lx_agn", "excess", "blended")
    kinds = (bool, bool, bool, float, float, float, bool)
    columns = {
        name: np.array([row[i] for row in rows], dtype=kind)
        for i, (name, kind) in enumerate(zip(names, kinds, strict=True))
    }
    found = judge_thresholds(**columns, flux_limit=flux_limit, floor=floor, thresholds=thresholds)
    for codes, threshold in zip(found, thresholds, strict=True):
        assert codes.dtype == np.int8
        expected = [slow_fate(row, flux_limit, floor, threshold) for row in rows]
        assert [FATES[code] for code in codes] == expected
        single = judge(**columns, flux_limit=flux_limit, floor=floor, threshold=threshold)
        np.testing.assert_array_equal(single, codes)


def test_equality_passes():
    assert fate(flux_counted=1e-16, lx_agn=1e39, excess=2.0) == "visible"
    just = {"flux_counted": 1e-16, "lx_agn": 1e39, "excess": 2.0}
    below = {name: np.nextafter(value, 0.0) for name, value in just.items()}
    for name, word in zip(just, ("faint", "underfloor", "outshone"), strict=True):
        assert fate(**(just | {name: below[name]})) == word
    assert fate(**below) == "faint+underfloor+outshone"


def test_earlier_words_win():
    dark = {"flux_counted": 0.0, "lx_agn": 0.0, "excess": 0.0}
    assert fate(usable=False, has_hole=False, accreting=False, **dark) == "unusable"
    assert fate(has_hole=False, accreting=False, **dark) == "no_black_hole"
    assert fate(has_hole=False, **dark) == "no_black_hole"
    assert fate(accreting=False, **dark) == "dormant"


def test_a_floor_of_zero_is_no_floor():
    assert fate(lx_agn=1e30) == "underfloor"
    assert fate(lx_agn=1e30, floor=0.0) == "visible"


def test_a_source_without_background_stands_out():
    assert fate(excess=np.inf) == "visible"


@pytest.mark.parametrize("column", ["flux_counted", "lx_agn", "excess"])
def test_a_missing_number_never_passes_as_visible(column):
    assert fate(**{column: np.nan}) == "unusable"
    # where nothing is compared, nothing is missing
    assert fate(**{column: np.nan, "accreting": False}) == "dormant"
    assert fate(**{column: np.nan, "has_hole": False}) == "no_black_hole"


def test_blending_adds_its_word_to_the_others():
    assert fate(blended=True) == "blended"
    assert fate(blended=True, flux_counted=0.0, excess=1.0) == "faint+outshone+blended"


def random_rows(rows):
    draw = np.random.default_rng(8)
    return {
        "usable": draw.random(rows) < 0.9,
        "has_hole": draw.random(rows) < 0.9,
        "accreting": draw.random(rows) < 0.9,
        "flux_counted": 10 ** draw.uniform(-18, -13, rows),
        "lx_agn": 10 ** draw.uniform(37, 42, rows),
        "excess": 10 ** draw.uniform(-2, 2, rows),
    }


def test_an_infinite_limit_hides_every_row():
    codes = judge(**random_rows(500), flux_limit=np.inf, floor=1e39, threshold=2.0)
    assert fate_code("visible") not in codes
    assert all("faint" in FATES[code] for code in codes[codes > 2])


@settings(max_examples=60, deadline=None)
@given(
    limits=st.tuples(st.floats(0, 1e-13), st.floats(0, 1e-13)),
    floors=st.tuples(st.floats(0, 1e42), st.floats(0, 1e42)),
    thresholds=st.tuples(st.floats(0.01, 100), st.floats(0.01, 100)),
)
def test_a_stricter_choice_never_makes_a_row_visible(limits, floors, thresholds):
    easy = [min(pair) for pair in (limits, floors, thresholds)]
    hard = [max(pair) for pair in (limits, floors, thresholds)]
    names = ("flux_limit", "floor", "threshold")
    rows = random_rows(100)
    loose = judge(**rows, **dict(zip(names, easy, strict=True))) == fate_code("visible")
    for i in range(3):
        one_harder = [*easy[:i], hard[i], *easy[i + 1 :]]
        strict = judge(**rows, **dict(zip(names, one_harder, strict=True)))
        assert not np.any((strict == fate_code("visible")) & ~loose)


def test_the_given_arrays_are_left_as_they_were():
    rows = random_rows(50)
    before = {name: values.copy() for name, values in rows.items()}
    judge_thresholds(**rows, flux_limit=1e-16, floor=1e39, thresholds=[1.0, 2.0])
    for name, values in before.items():
        np.testing.assert_array_equal(rows[name], values)
