"""Tallies, against pandas as an outside counter, exact fractions, and what any count must obey."""

from __future__ import annotations

import json
import math
import pickle
from fractions import Fraction
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from astropy.stats import binom_conf_interval
from hypothesis import example, given, settings
from hypothesis import strategies as st

from embersift.errors import CatalogueError, RecipeError
from embersift.exact_sums import as_floats, exact_sums
from embersift.tallying import (
    Tally,
    count,
    format_threshold,
    lines,
    split_fate_column,
    to_records,
    where_hidden_lines,
)
from embersift.verdict import FATES, fate_code

EDGES = [8.0, 8.5, 9.0, 10.0]
BINS = ["below", "8-8.5", "8.5-9", "9-10", "above", "no value"]
CAUSES = [name for name in FATES if name not in ("unusable", "no_black_hole", "visible")]


def codes(*names):
    return np.array([fate_code(name) for name in names], dtype=np.int8)


def invented(rows, seed=3, fates=range(11)):
    """Values on and off every edge, NaN among them; fates; weights with zeros; shared hosts."""
    draw = np.random.default_rng(seed)
    special = np.array([*EDGES, np.nan, np.inf, -np.inf, np.nextafter(10.0, 11.0)])
    values = np.where(
        draw.random(rows) < 0.3, special[draw.integers(0, special.size, rows)],
        draw.uniform(7.5, 10.5, rows),
    )  # fmt: skip
    columns = {
        f"fate_{name}": draw.choice(np.array(fates, dtype=np.int8), rows)
        for name in ("any_1", "any_2", "very_deep_2.5")
    }
    weight = np.where(draw.random(rows) < 0.1, 0.0, draw.lognormal(0.0, 3.0, rows))
    host = draw.integers(0, max(1, rows // 2), rows).astype(np.uint64) * np.uint64(2**61 + 3)
    group = draw.integers(0, 2, rows)
    return values, columns, weight, host, group


def pandas_bins(values):
    """The same slots by pandas.cut, which is told the last edge by hand."""
    values = pd.Series(values)
    slot = pd.cut(values, EDGES, right=False, labels=BINS[1:4]).astype(object)
    slot[values == EDGES[-1]] = "9-10"
    slot[values < EDGES[0]] = "below"
    slot[values > EDGES[-1]] = "above"
    slot[values.isna()] = "no value"
    return slot.to_numpy()


def look(frame, observation="any", threshold=2.0, group="all"):
    here = frame[
        (frame["observation"] == observation)
        & (frame["threshold"] == threshold)
        & (frame["split"] == group)
    ]
    return here.set_index("bin")


# --- columns and labels ---------------------------------------------------------------------


@pytest.mark.parametrize("threshold", [1.0, 2.0, 2.5, 0.1, 1e-5, 3e20])
@pytest.mark.parametrize("name", ["any", "very_deep", "x_2", "a_b_c"])
def test_fate_columns_are_taken_apart_as_they_were_put_together(name, threshold):
    column = f"fate_{name}_{format_threshold(threshold)}"
    assert split_fate_column(column) == (name, threshold)


def test_thresholds_are_written_without_needless_digits():
    assert [format_threshold(t) for t in (1.0, 2.5, 10.0)] == ["1", "2.5", "10"]


@pytest.mark.parametrize(
    "name",
    ["fate", "fate_any", "fate_any_", "fate__2", "fate_any_two", "fate_any_2.0", "fate_any_nan",
     "fate_any_0", "fate_any_-2", "fate_any_1e", "fate_2", "Fate_any_2", "my_fate_any_2", "lbol"],
)  # fmt: skip
def test_other_columns_are_no_fate_columns(name):
    assert split_fate_column(name) is None


def test_bins_are_closed_below_and_the_last_one_on_both_sides():
    values = [7.999, 8.0, 8.499, 8.5, 9.0, 10.0, np.nextafter(10.0, 11.0), np.nan, np.inf, -np.inf]
    frame = count(values, {"fate_any_2": codes(*["visible"] * 10)}, EDGES).table()
    assert dict(zip(frame["bin"], frame["rows"], strict=True)) == {
        "below": 2, "8-8.5": 2, "8.5-9": 1, "9-10": 2, "above": 2, "no value": 1,
    }  # fmt: skip
    assert frame["low"].tolist()[:5] == [-np.inf, 8.0, 8.5, 9.0, 10.0]
    assert frame["high"].tolist()[:5] == [8.0, 8.5, 9.0, 10.0, np.inf]
    assert frame[["low", "high"]].iloc[5].isna().all()


def test_edges_below_zero_are_readable():
    frame = count([-1.5], {"fate_any_2": codes("visible")}, [-2, -1, 0]).table()
    assert frame["bin"].tolist()[1:3] == ["-2 to -1", "-1 to 0"]


def test_many_bins_are_counted_like_few():
    draw = np.random.default_rng(4)
    values = np.concatenate([draw.uniform(-1, 101, 5000), np.arange(101.0), [np.nan]])
    fates = {"fate_any_2": np.full(values.size, 3, dtype=np.int8)}
    many = count(values, fates, np.arange(101.0)).table()
    expected, _ = np.histogram(values[~np.isnan(values)], np.arange(101.0))  # same convention
    assert many["rows"].tolist()[1:-2] == expected.tolist()
    assert many["rows"].sum() == values.size


# --- counts against pandas ------------------------------------------------------------------


@settings(max_examples=25, deadline=None)
@given(rows=st.integers(0, 300), seed=st.integers(0, 10**6))
def test_counts_are_those_of_a_crosstab(rows, seed):
    values, columns, _, _, group = invented(rows, seed)
    frame = count(values, columns, EDGES, split=(group, ["one", "two"])).table()
    slot = pandas_bins(values)
    for column, fate in columns.items():
        names = np.array(FATES, dtype=object)[fate]
        for g, label in enumerate(["one", "two"]):
            here = look(frame, *split_fate_column(column), label)
            assert here.index.tolist() == BINS
            crossed = pd.crosstab(slot[group == g], names[group == g])
            crossed = crossed.reindex(index=BINS, columns=FATES, fill_value=0)
            holes = crossed.drop(columns=["unusable", "no_black_hole"]).sum(axis=1)
            expected = {
                "rows": crossed.sum(axis=1),
                "galaxies": crossed.sum(axis=1),
                "unusable": crossed["unusable"],
                "no_black_hole": crossed["no_black_hole"],
                "black_holes": holes,
                "accreting": holes - crossed["dormant"],
                "visible": crossed["visible"],
                "hidden": holes - crossed["visible"],
                **{cause: crossed[cause] for cause in CAUSES if "blended" not in cause},
            }
            for name, numbers in expected.items():
                assert here[name].tolist() == numbers.tolist(), name
            assert here["occupied"].isna().all()


@settings(max_examples=25, deadline=None)
@given(rows=st.integers(1, 200), seed=st.integers(0, 10**6), weighted=st.booleans())
def test_visible_and_exclusive_causes_add_up_to_the_black_holes(rows, seed, weighted):
    values, columns, weight, _, _ = invented(rows, seed, fates=range(19))
    frame = count(values, columns, EDGES, weight=weight if weighted else None).table()
    causes = frame[[name for name in CAUSES if name in frame.columns]].sum(axis=1)
    np.testing.assert_allclose(causes + frame["visible"], frame["black_holes"], rtol=1e-12)
    np.testing.assert_allclose(causes, frame["hidden"], rtol=1e-12)
    np.testing.assert_allclose(frame["accreting"] + frame["dormant"], frame["black_holes"])
    if not weighted:
        assert (causes + frame["visible"]).tolist() == frame["black_holes"].tolist()
        apart = frame[["unusable", "no_black_hole", "black_holes"]].sum(axis=1)
        assert apart.tolist() == frame["rows"].tolist()


def test_blended_causes_are_columns_only_where_rows_blend():
    without = count([8.2], {"fate_any_2": codes("faint")}, EDGES).table()
    assert not any("blended" in name for name in without.columns)
    with_it = count([8.2], {"fate_any_2": codes("faint+blended")}, EDGES).table()
    assert look(with_it)["faint+blended"].sum() == 1


def test_an_empty_block_shows_every_bin_and_no_fraction():
    frame = count([], {"fate_any_2": codes()}, EDGES, host=np.empty(0, np.uint64)).table()
    assert frame["bin"].tolist() == BINS
    assert frame["rows"].sum() == 0
    assert (
        frame[["hidden_fraction", "hidden_low", "hidden_high", "occupation"]].isna().all(axis=None)
    )


# --- fractions ------------------------------------------------------------------------------


@pytest.mark.parametrize("interval", ["wilson", "jeffreys"])
def test_fractions_and_intervals_are_those_of_astropy(interval):
    values, columns, _, _, _ = invented(400)
    frame = count(values, columns, EDGES).table(interval=interval, level=0.9)
    for part, whole, fraction, low, high in [
        (frame["hidden"], frame["black_holes"], "hidden_fraction", "hidden_low", "hidden_high"),
        (
            frame["accreting"] - frame["visible"], frame["accreting"],
            "hidden_fraction_accreting", "hidden_accreting_low", "hidden_accreting_high",
        ),
    ]:  # fmt: skip
        np.testing.assert_allclose(frame[fraction], part / whole)
        expected = binom_conf_interval(part, whole, confidence_level=0.9, interval=interval)
        np.testing.assert_allclose(frame[[low, high]].to_numpy().T, expected, rtol=1e-10)
    assert (frame["n_effective"] == frame["black_holes"]).all()
    assert set(frame["interval"]) == {interval}
    assert set(frame["level"]) == {0.9}


def test_hidden_fraction_of_ten_is_that_of_the_sheet():
    # coefficient sheet, observer's side, 9: Wilson, 1 sigma, 3/10 and 10/10
    fates = codes(*["faint"] * 3, *["visible"] * 7, *["dormant"] * 10)
    frame = count([8.2] * 10 + [8.7] * 10, {"fate_any_2": fates}, EDGES).table()
    some, all_ = look(frame).loc["8-8.5"], look(frame).loc["8.5-9"]
    assert some["hidden_fraction"] == 0.3
    assert (some["hidden_low"], some["hidden_high"]) == pytest.approx((0.17882, 0.45754), abs=5e-6)
    assert (all_["hidden_low"], all_["hidden_high"]) == pytest.approx((0.90909, 1.0), abs=5e-6)
    assert all_["hidden_high"] == 1.0
    assert math.isnan(all_["hidden_fraction_accreting"])


# --- weights --------------------------------------------------------------------------------


@settings(max_examples=40, deadline=None)
@given(
    st.lists(
        st.tuples(st.one_of(st.just(0.0), st.floats(1e-300, 1e300)), st.integers(0, 2)),
        max_size=40,
    )
)
@example([(1e16, 0), (1.0, 0), (1.0, 0)])
def test_weights_are_summed_without_rounding(terms):
    values = np.array([value for value, _ in terms])
    index = np.array([at for _, at in terms], dtype=np.intp)
    sums = exact_sums(values, index, 3)
    for at in range(3):
        # rational arithmetic of the standard library
        exact = sum((Fraction(value) for value, i in terms if i == at), Fraction(0))
        assert Fraction(sums[at], 2**1074) == exact
    np.testing.assert_array_equal(
        as_floats(sums), [math.fsum(v for v, i in terms if i == at) for at in range(3)]
    )


def test_sums_longer_than_a_step_are_exact():
    draw = np.random.default_rng(6)
    values, index = draw.lognormal(0.0, 5.0, 600_000), draw.integers(0, 4, 600_000)
    found = as_floats(exact_sums(values, index, 4))
    assert found.tolist() == [math.fsum(values[index == i]) for i in range(4)]


@settings(max_examples=15, deadline=None)
@given(rows=st.integers(1, 200), seed=st.integers(0, 10**6))
def test_weighted_counts_are_those_of_groupby(rows, seed):
    values, columns, weight, _, _ = invented(rows, seed)
    frame = look(count(values, columns, EDGES, weight=weight).table())
    fate = np.array(FATES, dtype=object)[columns["fate_any_2"]]
    table = pd.DataFrame({"bin": pandas_bins(values), "fate": fate, "w": weight})
    sums = table.groupby(["bin", "fate"])["w"].sum().unstack(fill_value=0.0)
    sums = sums.reindex(index=BINS, columns=FATES, fill_value=0.0)
    holes = sums.drop(columns=["unusable", "no_black_hole"]).sum(axis=1)
    np.testing.assert_allclose(frame["black_holes"], holes, rtol=1e-12)
    np.testing.assert_allclose(frame["visible"], sums["visible"], rtol=1e-12)
    np.testing.assert_allclose(frame["unusable"], sums["unusable"], rtol=1e-12)
    np.testing.assert_allclose(frame["galaxies"], sums.sum(axis=1), rtol=1e-12)
    counted = table.groupby("bin").size().reindex(BINS, fill_value=0)
    assert frame["rows"].tolist() == counted.tolist()
    with np.errstate(invalid="ignore"):
        share = ((holes - sums["visible"]) / holes).to_numpy()
    np.testing.assert_allclose(frame["hidden_fraction"], share, rtol=1e-9, atol=1e-12)


def test_equal_weights_change_no_fraction_and_no_interval():
    values, columns, _, host, _ = invented(300)
    plain = count(values, columns, EDGES, host=host).table()
    weighted = count(values, columns, EDGES, host=host, weight=np.full(300, 0.3)).table()
    for name in plain.columns:
        if "fraction" in name or "_low" in name or "_high" in name or name == "n_effective":
            np.testing.assert_allclose(weighted[name], plain[name], rtol=1e-9, atol=1e-12)
        elif plain[name].dtype.kind in "iu" and name != "rows":
            np.testing.assert_allclose(weighted[name], 0.3 * plain[name], rtol=1e-12)


def test_unequal_weights_widen_the_interval():
    fates = {"fate_any_2": codes(*["faint", "visible"] * 20)}
    plain = look(count([8.2] * 40, fates, EDGES).table()).loc["8-8.5"]
    weight = np.repeat([1.0, 9.0], 20)
    weighted = look(count([8.2] * 40, fates, EDGES, weight=weight).table()).loc["8-8.5"]
    # Kish: (20 + 180)^2 / (20 + 1620)
    assert weighted["n_effective"] == pytest.approx(24.390244)
    assert weighted["hidden_fraction"] == plain["hidden_fraction"] == 0.5
    assert weighted["hidden_low"] < plain["hidden_low"]
    assert weighted["hidden_high"] > plain["hidden_high"]


def test_weighted_bins_where_all_or_none_are_hidden_touch_their_ends():
    fates = {"fate_any_2": codes(*["faint"] * 5, *["visible"] * 5)}
    weight = [0.1, 0.2, 0.3, 0.7, 1.1] * 2
    frame = look(count([8.2] * 5 + [8.7] * 5, fates, EDGES, weight=weight).table())
    assert frame.loc["8-8.5", "hidden_high"] == 1.0
    assert frame.loc["8.5-9", "hidden_low"] == 0.0


def test_rows_of_weight_zero_are_rows_and_nothing_else():
    fates = {"fate_any_2": codes("faint", "visible")}
    frame = look(count([8.2, 8.2], fates, EDGES, weight=[0.0, 0.0]).table()).loc["8-8.5"]
    assert frame["rows"] == 2
    assert frame["black_holes"] == frame["n_effective"] == 0.0
    assert math.isnan(frame["hidden_fraction"])
    assert math.isnan(frame["hidden_low"])


@pytest.mark.parametrize("bad", [-1.0, np.nan, np.inf, 1e200, 1e-200])
def test_a_weight_that_cannot_be_counted_is_named_with_its_row(bad):
    weight = [1.0, bad, 0.0]
    fates = {"fate_any_2": codes("visible", "visible", "visible")}
    with pytest.raises(CatalogueError, match=r"weight: 1 row cannot be counted \(row 1002: "):
        count([8.2] * 3, fates, EDGES, weight=weight, first_row=1000)


def test_many_bad_weights_are_counted_and_the_first_ones_named():
    fates = {"fate_any_2": codes(*["visible"] * 5)}
    with pytest.raises(
        CatalogueError, match=r"5 rows .*\(row 1: -1, row 2: -1, row 3: -1, \.\.\.\)"
    ):
        count([8.2] * 5, fates, EDGES, weight=[-1.0] * 5)


# --- galaxies -------------------------------------------------------------------------------


def test_a_galaxy_of_two_holes_is_one_galaxy():
    fates = {"fate_any_2": codes("visible", "faint", "no_black_hole", "unusable")}
    frame = look(count([8.2] * 4, fates, EDGES, host=[7, 7, 8, 9]).table()).loc["8-8.5"]
    assert frame["galaxies"] == 3
    assert frame["black_holes"] == 2
    assert frame["occupied"] == 1
    assert frame["occupation"] == 0.5  # galaxy 9 has no usable row
    # coefficient sheet's libraries: Wilson of 1 in 2 at one sigma
    expected = binom_conf_interval(1, 2, interval="wilson")
    assert [frame["occupation_low"], frame["occupation_high"]] == pytest.approx(expected.tolist())


def test_a_galaxy_whose_rows_lie_in_two_bins_counts_in_each():
    fates = {"fate_any_2": codes("visible", "no_black_hole")}
    frame = look(count([8.2, 8.7], fates, EDGES, host=[7, 7]).table())
    assert frame["galaxies"].tolist() == [0, 1, 1, 0, 0, 0]
    assert frame["occupied"].tolist() == [0, 1, 0, 0, 0, 0]


@settings(max_examples=25, deadline=None)
@given(rows=st.integers(1, 200), seed=st.integers(0, 10**6), weighted=st.booleans())
def test_galaxies_are_those_of_groupby(rows, seed, weighted):
    values, columns, weight, host, _ = invented(rows, seed)
    weight = weight if weighted else None
    frame = look(count(values, columns, EDGES, host=host, weight=weight).table())
    fate = np.maximum.reduce(list(columns.values()))
    table = pd.DataFrame(
        {
            "bin": pandas_bins(values),
            "host": host,
            "usable": fate >= 1,
            "hole": fate >= 2,
            "w": 1.0 if weight is None else weight,
        }
    )
    each = table.groupby(["bin", "host"]).max()
    for name, chosen in [("galaxies", each), ("occupied", each[each["hole"]])]:
        expected = chosen.groupby("bin")["w"].sum().reindex(BINS, fill_value=0.0)
        np.testing.assert_allclose(frame[name], expected, rtol=1e-12)
    usable = each[each["usable"]].groupby("bin")["w"].sum().reindex(BINS, fill_value=0.0)
    filled = usable.to_numpy() > 0.0
    share = frame["occupied"].to_numpy()[filled] / usable.to_numpy()[filled]
    np.testing.assert_allclose(frame["occupation"].to_numpy()[filled], share, rtol=1e-12)
    assert frame["occupation"][~filled].isna().all()


def test_negative_and_huge_host_codes_stay_apart():
    fates = {"fate_any_2": codes(*["visible"] * 4)}
    host = np.array([-1, 2**62 - 1, 2**62, 0], dtype=np.int64)
    assert count([8.2] * 4, fates, EDGES, host=host).table()["galaxies"].sum() == 4


# --- merging --------------------------------------------------------------------------------


@settings(max_examples=40, deadline=None)
@given(
    rows=st.integers(0, 120),
    cuts=st.lists(st.integers(0, 120), max_size=8),
    seed=st.integers(0, 10**6),
    weighted=st.booleans(),
    hosted=st.booleans(),
    order=st.randoms(use_true_random=False),
)
def test_any_partition_in_any_order_gives_the_tally_of_the_whole(
    rows, cuts, seed, weighted, hosted, order
):
    values, columns, weight, host, group = invented(rows, seed, fates=range(19))

    def part(rows):
        return count(
            values[rows], {k: v[rows] for k, v in columns.items()}, EDGES, by="log10 mstar",
            weight=weight[rows] if weighted else None, host=host[rows] if hosted else None,
            split=(group[rows], ["one", "two"]),
        )  # fmt: skip

    whole = part(np.arange(rows))
    edges = [0, *sorted(min(cut, rows) for cut in cuts), rows]
    shuffled = list(range(rows))
    order.shuffle(shuffled)
    blocks = [np.array(shuffled[a:b], dtype=int) for a, b in pairwise(edges)]
    merged = Tally.merge(part(block) for block in blocks)
    assert merged == whole
    # bit for bit, in the table too
    pd.testing.assert_frame_equal(merged.table(), whole.table(), check_exact=True)


def test_tallies_longer_than_a_step_are_those_of_their_parts():
    values, columns, weight, host, _ = invented(300_000)

    def part(a, b):
        fates = {k: v[a:b] for k, v in columns.items()}
        return count(values[a:b], fates, EDGES, weight=weight[a:b], host=host[a:b])

    whole = part(0, 300_000)
    assert part(0, 77_777) + (part(77_777, 200_001) + part(200_001, 300_000)) == whole
    assert pickle.loads(pickle.dumps(whole)) == whole


def test_a_long_stream_does_not_sort_its_galaxies_at_every_block():
    fates = {"fate_any_2": codes(*["visible"] * 10)}
    blocks = (count([8.2] * 10, fates, EDGES, host=np.arange(10) + 5 * i) for i in range(300))
    whole = Tally.merge(blocks)
    assert whole.table()["galaxies"].sum() == 10 + 5 * 299
    # each set is more than twice the next, so there are at most log2 of all
    assert max(len(parts) for parts in whole.galaxies.parts) <= math.log2(3000)


def test_tallies_of_other_data_differ():
    fates = {"fate_any_2": codes("visible")}
    one = count([8.2], fates, EDGES, host=[1], weight=[1.0])
    assert one != count([8.2], fates, EDGES, host=[2], weight=[1.0])
    assert one != count([8.2], fates, EDGES, host=[1], weight=[2.0])
    assert one != count([8.7], fates, EDGES, host=[1], weight=[1.0])
    assert one != "a tally"


@pytest.mark.parametrize(
    ("other", "words"),
    [
        ({"edges": [8.0, 9.0]}, "edges"),
        ({"by": "mbh"}, "count by"),
        ({"weight": [1.0]}, "weights"),
        ({"host": [1]}, "galaxies told apart"),
        ({"split": ([0], ["one"])}, "groups"),
        ({"fates": {"fate_any_5": codes("visible")}}, "fate columns"),
    ],
)
def test_tallies_of_different_choices_cannot_be_added(other, words):
    first = {"values": [8.2], "fates": {"fate_any_2": codes("visible")}, "edges": EDGES}
    with pytest.raises(RecipeError, match=words):
        count(**first) + count(**(first | other))


# --- what cannot be counted -----------------------------------------------------------------


@pytest.mark.parametrize("edges", [[], [8.0], [9.0, 8.0], [8.0, 8.0], [8.0, np.nan, 9.0], 8.0])
def test_edges_must_ascend_and_be_two_at_least(edges):
    with pytest.raises(RecipeError, match=r"tally\.edges: at least two values"):
        count([8.2], {"fate_any_2": codes("visible")}, edges)


def test_a_column_that_is_no_fate_column_is_refused():
    with pytest.raises(RecipeError, match="fate_NAME_T"):
        count([8.2], {"verdict": codes("visible")}, EDGES)


@pytest.mark.parametrize(
    "wrong",
    [
        {"fates": {"fate_any_2": np.array([19, 0], np.int8)}},
        {"fates": {"fate_any_2": np.array([-1, 0], np.int8)}},
        {"fates": {"fate_any_2": np.array([3], np.int8)}},
        {"weight": [1.0]},
        {"host": [1]},
        {"host": [1.0, 2.0]},
        {"split": ([0, 2], ["one", "two"])},
        {"split": ([0], ["one"])},
    ],
)
def test_arrays_that_do_not_fit_are_a_programming_error(wrong):
    right = {"values": [8.2, 8.7], "fates": {"fate_any_2": codes("visible", "faint")}}
    with pytest.raises(ValueError, match=r"codes must be|shape|integers are needed"):
        count(**(right | wrong), edges=EDGES)


# --- for people -----------------------------------------------------------------------------


def test_records_are_plain_json_with_the_same_numbers():
    values, columns, weight, host, _ = invented(100)
    for weights in (None, weight):
        frame = count(values, columns, EDGES, weight=weights, host=host).table()
        records = json.loads(json.dumps(to_records(frame), allow_nan=False))
        assert len(records) == len(frame)
        assert list(records[0]) == list(frame.columns)
        for record, (_, row) in zip(records, frame.iterrows(), strict=True):
            for name, value in record.items():
                if value is None:
                    assert not np.isfinite(row[name])
                else:
                    assert value == row[name]
    assert records[0]["low"] is None
    assert isinstance(records[0]["rows"], int)


def small(**options):
    fates = codes(
        *["visible"] * 1, *["dormant"] * 5, *["outshone"] * 3, "faint+outshone",
        "no_black_hole", "unusable",
    )  # fmt: skip
    values = [8.2] * 4 + [8.7] * 6 + [12.0, np.nan]
    return count(values, {"fate_any_2": fates}, EDGES, by="log10 mstar", **options).table()


def test_the_table_for_the_terminal_shows_every_bin_and_the_rows_outside():
    text = lines(small(), "any", 2.0)
    words = [line.split() for line in text]
    titles = ["log10 mstar", "black holes", "accreting", "visible", "hidden %", "interval"]
    assert words[0] == " ".join(titles).split()
    assert [row[0] for row in words[1:]] == ["8-8.5", "8.5-9", "9-10", "above", "no", "all"]
    assert words[1][1:5] == ["4", "1", "1", "75.0"]
    assert words[3][1:] == ["0", "0", "0", "-"]
    assert words[-1][1:5] == ["10", "5", "1", "90.0"]
    # of all: Wilson of 9 in 10 mirrors 1 in 10 of the sheet, 0.03887-0.23385
    assert words[-1][5:] == ["76.6", "-", "96.1"]


def test_where_the_hidden_ones_went_is_said_once_each_and_largest_first():
    text = where_hidden_lines(small(), "any", 2.0)
    assert [line.split() for line in text[1:]] == [
        ["dormant", "5", "55.6"],
        ["outshone", "3", "33.3"],
        ["faint+outshone", "1", "11.1"],
    ]


def test_nothing_hidden_is_said_in_words():
    frame = count([8.2], {"fate_any_2": codes("visible")}, EDGES).table()
    assert where_hidden_lines(frame, "any", 2.0) == ["  No black hole is hidden."]


def test_groups_are_shown_one_after_the_other():
    frame = small(split=([0, 1] * 6, ["central", "off-centre"]))
    for text in (lines(frame, "any", 2), where_hidden_lines(frame, "any", 2)):
        assert text[0].strip() == "central"
        assert "  off-centre" in text
    only = lines(frame[frame["split"] == "central"], "any", 2)
    assert "central" not in " ".join(only)


@pytest.mark.parametrize("scale", [1.0, 1e5, 1e140])
@pytest.mark.parametrize("width", [50, 80, 120])
def test_text_fits_the_terminal(width, scale):
    values, columns, weight, _, _ = invented(500, fates=range(19))
    frame = count(values, columns, EDGES, by="a_very_long_column_name_" * 3, weight=weight * scale)
    for text in (lines, where_hidden_lines):
        shown = text(frame.table(), "any", 2, width)
        assert max(map(len, shown)) <= width
        assert all(line == line.rstrip() for line in shown)


def test_weights_have_one_decimal_and_thousands_are_grouped():
    fates = {"fate_any_2": codes("dormant", "dormant")}
    plain = count([8.2] * 2000, {"fate_any_2": codes(*["faint"] * 2000)}, EDGES).table()
    assert "2,000" in lines(plain, "any", 2)[1]
    weighted = count([8.2, 8.2], fates, EDGES, weight=[1000.0, 0.26]).table()
    assert "1,000.3" in lines(weighted, "any", 2)[1]
    assert "1,000.3" in where_hidden_lines(weighted, "any", 2)[1]


def test_almost_all_is_not_shown_as_all():
    fates = {"fate_any_2": codes("visible", *["faint"] * 5000)}
    shown = lines(count([8.2] * 5001, fates, EDGES).table(), "any", 2)[1]
    assert ">99.9" in shown
    assert "100.0" not in shown


def test_a_threshold_is_found_by_the_digits_of_its_column():
    name = f"fate_any_{format_threshold(0.1 + 0.2)}"
    frame = count([8.2], {name: codes("visible")}, EDGES).table()
    assert len(lines(frame, "any", 0.1 + 0.2)) == 5


def test_what_was_not_counted_is_said_with_what_was():
    with pytest.raises(RecipeError, match="Counted: any at 2"):
        lines(small(), "deep", 2.0)
    with pytest.raises(RecipeError, match="deep at threshold 2"):
        where_hidden_lines(small(), "deep", 2.0)
