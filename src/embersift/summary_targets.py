"""What is printed after `reach` and `yield`."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from embersift.ranking import expected_successes
from embersift.reach import SET_BY
from embersift.summary import (
    SCREENING_ONLY,
    aperture_cautions,
    observation_words,
    problem_sentences,
    wrapped,
)

if TYPE_CHECKING:
    from embersift.arrays import Array
    from embersift.running import ReachedFile, SpreadFile, YieldFile
    from embersift.targets import Targets

__all__ = ["reach_lines", "spread_lines", "yield_lines"]

_FIRST = (1, 5, 10, 20, 50)


def _span(values: Array) -> str:
    """Median and the middle 90 % of the finite values."""
    finite = values[np.isfinite(values)]
    if not finite.size:
        return "-"
    low, middle, high = np.percentile(finite, [5.0, 50.0, 95.0])
    return f"{middle:.3g} ({low:.2g} to {high:.2g})"


def reach_lines(done: ReachedFile, width: int) -> list[str]:
    """The summary of `embersift reach`."""
    reached = done.reached
    recipe = reached.chain.recipe
    rows = reached.sources.mstar.size
    lines = wrapped("Read", f"{done.catalogue}: {rows:,} galaxies", width)
    label = "Laws"
    for law in reached.chain.laws:
        lines += wrapped(label, f"{law.name}: {law.source.citation or 'no source'}", width)
        label = ""
    label = "Observed"
    for observation in recipe.observation:
        lines += wrapped(label, f"{observation.name}: {observation_words(observation)}", width)
        label = ""
    lines.append("")
    for (name, threshold), one in reached.found.items():
        lines.append(f"{name} at threshold {threshold:g}: median (5 to 95 % of the galaxies)")
        shares = [
            f"{word} {np.count_nonzero(one.set_by == code):,}"
            for code, word in enumerate(SET_BY)
            if word and np.any(one.set_by == code)
        ]
        facts = [
            ("faintest L(2-10 keV)", f"{_span(one.lx)} erg/s"),
            ("faintest Eddington ratio", _span(one.eddington)),
            ("saturation depth", f"{_span(one.saturation_flux)} erg/s/cm2"),
            ("limit set by", ", ".join(shares) or "nothing"),
        ]
        if one.exposure_saturation is not None:
            facts.append(("exposure to saturation", f"{_span(one.exposure_saturation)} ks"))
        if one.exposure_wanted is not None:
            able = np.isfinite(one.exposure_wanted)
            facts.append(
                (
                    "exposure as wanted",
                    f"{_span(one.exposure_wanted)} ks; out of reach at any exposure for "
                    f"{np.count_nonzero(~able):,}",
                )
            )
        for word, value in facts:
            lines += textwrap.wrap(f"  {word:<26}{value}", width, subsequent_indent=" " * 28)
        lines.append("")
    if done.targets is not None:
        lines += _target_lines(done.targets, recipe.proposal.distribution, width)
    lines.append("Cautions")
    cautions = [
        *problem_sentences(reached.sources),
        "glow: the host's mean light sets the limit, and deeper exposures gain nothing; single "
        "dwarfs scatter about the mean.",
        *aperture_cautions(reached.chain, reached.sources),
        *done.cautions,
        SCREENING_ONLY,
    ]
    if any(np.any(one.not_monotonic) for one in reached.found.values()):
        cautions.insert(
            0,
            "not_monotonic: some lower accretion would pass too; the one reported is the lowest "
            "above which the galaxy stays visible.",
        )
    for caution in cautions:
        lines += textwrap.wrap(f"- {caution}", width, subsequent_indent="  ")
    return [*lines, "", f"Wrote {done.out}"]


def _target_lines(targets: Targets, distribution: str, width: int) -> list[str]:
    ranking = targets.ranking
    lines = textwrap.wrap(
        f"Targets ranked for {targets.observation} at threshold {targets.threshold:g}, Eddington "
        f"ratios {distribution}",
        width,
    )
    lines.append(f"  {'first':>6}{'expected successes':>20}{'68 % interval':>16}")
    known = int(np.count_nonzero(np.isfinite(ranking.odds)))
    for one in expected_successes(ranking.odds, [n for n in _FIRST if n < known] + [known]):
        lines.append(f"  {one.targets:>6}{one.expected:>20.2f}{f'{one.low} to {one.high}':>16}")
    lines.append("")
    return lines


def yield_lines(done: YieldFile, width: int) -> list[str]:
    """The summary of `embersift yield`."""
    survey = done.recipe.survey
    assert survey.area is not None
    assert survey.redshifts is not None
    low, high = survey.redshifts
    lines = textwrap.wrap(
        f"Visible sources expected on {survey.area:g} deg2 between redshifts {low:g} and {high:g}; "
        "one-sided 84 % limits of the number of rows, scaled",
        width,
    )
    expected = done.expected
    for name, limit in expected[["observation", "threshold"]].drop_duplicates().to_numpy():
        here = expected[(expected["observation"] == name) & (expected["threshold"] == limit)]
        lines += ["", f"{name} at threshold {limit:g}"]
        lines.append(f"  {here['by'].iloc[0]:<14}{'rows':>8}{'expected':>12}{'interval':>24}")
        for row in here.to_dict("records"):
            span = f"{row['expected_low']:.4g} to {row['expected_high']:.4g}"
            lines.append(f"  {row['bin']:<14}{row['rows']:>8.6g}{row['expected']:>12.4g}{span:>24}")
    lines += [
        "",
        *textwrap.wrap("Cosmic variance is not in the intervals. " + SCREENING_ONLY, width),
    ]
    if done.out is not None:
        lines.append(f"Wrote {done.out}")
    return lines


def spread_lines(done: SpreadFile, width: int) -> list[str]:
    """The summary of `embersift spread`."""
    result = done.result
    laws = result.combinations
    lines = wrapped(
        "Read",
        f"{done.catalogue}: {len(laws.every)} combinations of laws, {result.draws} draws of their "
        f"coefficients, seed {result.seed}",
        width,
    )
    headline = done.recipe.screen.headline
    between = result.between_laws()
    own = result.table()
    own = own[own["own"]]
    for observation in done.recipe.observation:
        name = observation.name
        lines += ["", f"{name} at threshold {headline:g}: hidden %, own laws and all laws"]
        lines.append(
            f"  {'bin':<10}{'own':>7}{'interval':>15}{'coefficients':>15}"
            f"{'laws 16-84 %':>15}{'all laws':>15}"
        )
        here = between[
            (between["observation"] == name) & np.isclose(between["threshold"], headline)
        ]
        mine = own[(own["observation"] == name) & np.isclose(own["threshold"], headline)]
        for row in here.to_dict("records"):
            (one,) = mine[mine["bin"] == row["bin"]].to_dict("records") or [None]
            if one is None or not one["black_holes"]:
                continue
            lines.append(
                f"  {row['bin']:<10}{100 * one['hidden_fraction']:>7.1f}"
                f"{_percent(one['hidden_low'], one['hidden_high']):>15}"
                f"{_percent(one['spread_low'], one['spread_high']):>15}"
                f"{_percent(row['percentile_16'], row['percentile_84']):>15}"
                f"{_percent(row['lowest'], row['highest']):>15}"
            )
    lines += _ranking_lines(done)
    cautions = [f"left out: {reason}" for reason in map(str, laws.skipped)]
    silent = [law for law, names in result.not_drawn.items() if names]
    if silent:
        cautions.append(
            f"no errors are known to us for {', '.join(silent)}: the coefficient spread is a lower "
            "limit for them."
        )
    cautions += [
        "coefficients are drawn independently; no covariances are published in our sheets, so "
        "lehmer2021 spreads too widely at low O/H.",
        SCREENING_ONLY,
    ]
    lines += ["", "Cautions"]
    for caution in cautions:
        lines += textwrap.wrap(f"- {caution}", width, subsequent_indent="  ")
    return [*lines, "", f"Wrote {done.out}"]


def _percent(low: float, high: float) -> str:
    return f"{100 * low:.1f} - {100 * high:.1f}" if np.isfinite(low + high) else "-"


def _ranking_lines(done: SpreadFile) -> list[str]:
    """Which law in place of the recipe's own moves the hidden share, most first."""
    ranking = done.result.ranking()
    headline = done.recipe.screen.headline
    lines: list[str] = []
    for observation in done.recipe.observation:
        name = observation.name
        here = ranking[
            (ranking["observation"] == name) & np.isclose(ranking["threshold"], headline)
        ]
        lines += [
            "",
            f"{name} at threshold {headline:g}: what moves the hidden share most (points)",
        ]
        lines.append(f"  {'choice':<11}{'law':<22}{'instead of':<22}{'change':>7}{'range':>17}")
        for row in here.to_dict("records"):
            span = f"{100 * row['change_low']:.1f} to {100 * row['change_high']:.1f}"
            lines.append(
                f"  {row['choice']:<11}{row['law']:<22}{row['instead_of']:<22}"
                f"{100 * row['change']:>+7.1f}{span:>17}"
            )
    return lines
