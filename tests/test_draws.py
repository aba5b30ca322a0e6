"""Random numbers keyed by row and by coefficient."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from embersift.draws import (
    coefficient_draws,
    drawn_coefficients,
    normal,
    numbered_keys,
    philox,
    row_keys,
    stream_of,
    undrawn_coefficients,
    uniform,
)
from embersift.errors import RecipeError
from embersift.laws import ACCRETION, BACKGROUND, BOLOMETRIC, all_laws

KEYS = np.arange(200_000, dtype=np.uint64)
WORD = st.integers(0, 2**64 - 1)


# Known answers of the authors' own library for Philox4x32-10 (from memory): zeros, ones, digits of
# pi, in the order counter, key, result.
@pytest.mark.parametrize(
    ("counter", "key", "expected"),
    [
        ((0,) * 4, (0, 0), (0x6627E8D5, 0xE169C58D, 0xBC57AC4C, 0x9B00DBD8)),
        (
            (0xFFFFFFFF,) * 4,
            (0xFFFFFFFF,) * 2,
            (0x408F276D, 0x41C83B0E, 0xA20BC7C6, 0x6D5451FD),
        ),
        (
            (0x243F6A88, 0x85A308D3, 0x13198A2E, 0x03707344),
            (0xA4093822, 0x299F31D0),
            (0xD16CFE09, 0x94FDCCEB, 0x5001E420, 0x24126EA1),
        ),
    ],
)
def test_philox_gives_the_known_answers(counter, key, expected):
    words = tuple(np.array([word], dtype=np.uint64) for word in counter)
    assert tuple(int(word[0]) for word in philox(words, key)) == expected


@pytest.mark.parametrize("seed", [0, 1, 2**63])
def test_draws_are_uniform(seed):
    counts, _ = np.histogram(uniform(KEYS, seed), bins=500, range=(0.0, 1.0))
    assert stats.chisquare(counts).pvalue > 1e-4


def test_normal_draws_are_normal():
    assert stats.kstest(normal(KEYS, 3), "norm").pvalue > 1e-4


@pytest.mark.parametrize("what", ["next key", "next seed", "next stream", "named streams"])
def test_neighbours_are_independent(what):
    one = uniform(KEYS, 5, 7)
    other = {
        "next key": uniform(KEYS + np.uint64(1), 5, 7),
        "next seed": uniform(KEYS, 6, 7),
        "next stream": uniform(KEYS, 5, 8),
        "named streams": uniform(KEYS, 5, stream_of("background", "lehmer2019")),
    }[what]
    # independent uniform pairs fill the cells of a square alike
    cells, _, _ = np.histogram2d(one, other, bins=20, range=((0, 1), (0, 1)))
    assert stats.chisquare(cells.ravel()).pvalue > 1e-4


@given(keys=st.lists(WORD, min_size=1, max_size=20), seed=WORD, stream=WORD)
@settings(max_examples=50, deadline=None)
def test_draw_depends_on_its_own_key_alone(keys, seed, stream):
    array = np.array(keys, dtype=np.uint64)
    whole = uniform(array, seed, stream)
    assert ((whole > 0.0) & (whole < 1.0)).all()
    assert [uniform(array[i : i + 1], seed, stream)[0] for i in range(array.size)] == whole.tolist()


def test_same_rows_get_the_same_draws_in_any_chunk_and_order():
    ids = np.array([f"galaxy-{i}" for i in range(40_000)], dtype=object)
    whole = normal(row_keys(ids), 1)
    order = np.random.default_rng(1).permutation(ids.size)
    assert np.array_equal(normal(row_keys(ids[order]), 1), whole[order])
    parts = [normal(row_keys(ids[i : i + 777]), 1) for i in range(0, ids.size, 777)]
    assert np.array_equal(np.concatenate(parts), whole)
    numbers = [uniform(numbered_keys(first, 500), 1) for first in (0, 500)]
    assert np.array_equal(np.concatenate(numbers), uniform(numbered_keys(0, 1000), 1))


def test_ids_are_text():
    assert row_keys([7])[0] == row_keys(["7"])[0]
    assert row_keys(["007"])[0] != row_keys(["7"])[0]


@pytest.mark.parametrize("seed", [-1, 2**64])
def test_seed_out_of_range_is_refused(seed):
    with pytest.raises(RecipeError, match=r"random\.seed"):
        uniform(KEYS[:2], seed)


# --- coefficients -----------------------------------------------------------------------------


def test_spread_of_draws_is_the_published_error():
    n = 20_000
    # published (laws/binaries.py, laws/bolometric.py): 29.37 +- 0.15, 2.03 +- 0.60, 9.65 +- 1.004
    for law, name, value, error in (
        (BACKGROUND["lehmer2016"], "log_per_mstar", 29.37, 0.15),
        (BACKGROUND["lehmer2016"], "mstar_redshift", 2.03, 0.60),
        (BOLOMETRIC["lopez2024"], "k", 9.65, 1.004),
    ):
        drawn = np.array([one[name] for one in coefficient_draws(law, n, 1)])
        # sampling error of a mean, and of a standard deviation
        assert drawn.mean() == pytest.approx(value, abs=4.0 * error / math.sqrt(n))
        assert drawn.std() == pytest.approx(error, rel=4.0 / math.sqrt(2.0 * n))


def test_percentiles_of_lopsided_draws_are_the_published_limits():
    # Lehmer et al. 2019: log beta = 39.71 -0.09 +0.14
    drawn = [one["log_per_sfr"] for one in coefficient_draws(BACKGROUND["lehmer2019"], 40_000, 2)]
    low, middle, high = np.percentile(drawn, [15.866, 50.0, 84.134])
    assert low == pytest.approx(39.71 - 0.09, abs=0.003)
    assert middle == pytest.approx(39.71, abs=0.003)
    assert high == pytest.approx(39.71 + 0.14, abs=0.005)


def test_coefficients_are_drawn_independently():
    drawn = coefficient_draws(BACKGROUND["lehmer2016"], 20_000, 1)
    correlation = np.corrcoef(np.array([list(one.values()) for one in drawn]).T)
    assert np.abs(correlation - np.eye(4)).max() < 4.0 / math.sqrt(20_000)


def test_more_draws_begin_with_the_same_ones():
    law = BACKGROUND["lehmer2021"]
    assert coefficient_draws(law, 50, 9)[:7] == coefficient_draws(law, 7, 9)
    assert coefficient_draws(law, 7, 9) != coefficient_draws(law, 7, 10)


def test_coefficients_without_error_stay_and_are_named():
    law = ACCRETION["two-regime"]
    assert drawn_coefficients(law) == ()
    assert undrawn_coefficients(law) == tuple(law.coefficients)
    assert coefficient_draws(law, 3, 1) == [dict(law.values)] * 3


def test_every_law_can_be_drawn():
    for law in all_laws():
        drawn = coefficient_draws(law, 3, 1)
        assert [set(one) for one in drawn] == [set(law.coefficients)] * 3
        assert set(drawn_coefficients(law)).isdisjoint(undrawn_coefficients(law))


def test_scale_is_never_drawn_below_zero():
    # b = 0.05 +- 0.03: one plain draw in twenty would be negative
    drawn = [one["b"] for one in coefficient_draws(BOLOMETRIC["duras2020-eddington"], 5_000, 1)]
    assert min(drawn) > 0.0


@pytest.mark.parametrize("n", [0, -3])
def test_no_draws_are_refused(n):
    with pytest.raises(RecipeError, match="at least one draw"):
        coefficient_draws(BACKGROUND["lehmer2019"], n, 1)
