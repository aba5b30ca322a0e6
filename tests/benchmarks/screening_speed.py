"""How fast is a screening in memory, beside what an astronomer would write?

Run: python tests/benchmarks/screening_speed.py [rows]

Both sides do the default recipe with one observation and three thresholds on the same table in
one process: `embersift.screen` on a DataFrame, and the straightforward whole-array version with
astropy's constants and distance. Medians of five. The verdicts of both must agree.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable

import numpy as np
import pandas as pd
from astropy import constants, units
from astropy.cosmology import FlatLambdaCDM
from scipy.integrate import quad

import embersift
from embersift.catalogue import layout
from embersift.chain import Chain
from embersift.laws.luminosity_functions import LUMINOSITY_FUNCTIONS
from embersift.mock import population

REPEATS = 5


def straightforward(table: pd.DataFrame) -> pd.DataFrame:
    """The same chain as one would write it for a paper: whole arrays, astropy's distance."""
    cosmology = FlatLambdaCDM(H0=70, Om0=0.3, Tcmb0=0)
    msun = constants.M_sun.cgs.value
    eddington = (
        4 * np.pi * constants.G.cgs.value * msun * constants.m_p.cgs.value * constants.c.cgs.value
    ) / constants.sigma_T.cgs.value
    light = msun / (365.25 * 86400) * constants.c.cgs.value**2
    out = table.copy()
    mstar, sfr = table["mstar"].to_numpy(), table["sfr"].to_numpy()
    mbh, mdot, z = (table[c].to_numpy() for c in ("mbh", "mdot", "redshift"))
    oh12 = table["oh12"].to_numpy()
    with np.errstate(all="ignore"):
        thin = 0.1 * mdot * light
        ratio = thin / (eddington * mbh)
        out["lbol"] = np.where(ratio >= 0.1, thin, thin * ratio / 0.1)
        out["eddington_ratio"] = out["lbol"] / (eddington * mbh)
        x = np.maximum(np.log10(out["lbol"] / 3.828e33), 0)
        out["lx_agn"] = out["lbol"] / (10.96 * (1 + (x / 11.93) ** 17.79))
        binaries = (10**0.2 - 2**0.2) / (8**0.2 - 0.5**0.2)
        grid = np.linspace(7.0, 9.2, 221)
        function = LUMINOSITY_FUNCTIONS["lehmer2021"]
        per_sfr = 1e38 * np.asarray(function.moment(1, 0.01, 1e4, grid))
        known = np.interp(oh12, grid, per_sfr)
        out["lx_hmxb"] = sfr * np.where(np.isnan(oh12), 10**39.71, known) * binaries
        out["lx_lmxb"] = 10**29.25 * mstar * binaries
        gas_ratio = 0.0
        for kt, share in ((0.24, 2 / 3), (0.71, 1 / 3)):
            hard = quad(lambda e, kt=kt: np.exp(-e / kt), 2, 10)[0]
            gas_ratio += share * hard / quad(lambda e, kt=kt: np.exp(-e / kt), 0.5, 2)[0]
        soft_gas = 5.2e38 * sfr / 0.67
        out["lx_gas"] = soft_gas * gas_ratio
        out["lx_background"] = out["lx_hmxb"] + out["lx_lmxb"] + out["lx_gas"]
        out["excess"] = out["lx_agn"] / out["lx_background"]
        distance = np.full(len(z), np.nan)
        good = z > 0
        distance[good] = cosmology.luminosity_distance(z[good]).to_value(units.cm)
        area = 4 * np.pi * distance**2
        shift = (1 + z) ** 0.2
        gas_flux = np.zeros(len(z))
        for kt, share in ((0.24, 2 / 3), (0.71, 1 / 3)):
            norm = share / (np.exp(-0.5 / kt) - np.exp(-2 / kt))
            gas_flux += norm * (np.exp(-2 * (1 + z) / kt) - np.exp(-10 * (1 + z) / kt))
        out["flux_agn_any"] = out["lx_agn"] * shift / area
        out["flux_background_any"] = (
            (out["lx_hmxb"] + out["lx_lmxb"]) * shift + soft_gas * gas_flux
        ) / area
        out["excess_any"] = out["flux_agn_any"] / out["flux_background_any"]
        fed = ((mdot >= 0) & np.isfinite(mdot)) | (mbh == 0)
        bad = ~((mstar > 0) & (sfr >= 0) & fed & (z > 0))
        for t in (1, 2, 5):
            under = (out["lx_agn"] < 1e39).to_numpy()
            outshone = (out["excess_any"] < t).to_numpy()
            fate = np.select(
                [bad, mbh == 0, mdot == 0, under & outshone, under, outshone],
                [
                    "unusable",
                    "no_black_hole",
                    "dormant",
                    "underfloor+outshone",
                    "underfloor",
                    "outshone",
                ],
                "visible",
            )
            out[f"fate_any_{t}"] = fate
    return out


def median_time(work: Callable[[], object]) -> float:
    times = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return statistics.median(times)


def main(rows: int) -> None:
    table = population(rows, seed=1)
    ours, theirs = embersift.screen(table), straightforward(table)
    for t in (1, 2, 5):
        differ = int((ours[f"fate_any_{t}"].astype(str) != theirs[f"fate_any_{t}"]).sum())
        print(f"threshold {t}: {differ} of {rows:,} verdicts differ")
    recipe = embersift.Recipe()
    chain = Chain(recipe)
    sources = layout(list(table.columns), {}, recipe).take(table)
    plain = median_time(lambda: straightforward(table))
    screened = median_time(lambda: embersift.screen(table))
    alone = median_time(lambda: chain.run(sources))
    one = median_time(lambda: chain.run(sources, threads=1))
    print(f"straightforward, astropy distance   {plain:8.3f} s   {rows / plain / 1e6:6.2f} Mrow/s")
    print(
        f"embersift.screen, DataFrame         {screened:8.3f} s   "
        f"{rows / screened / 1e6:6.2f} Mrow/s"
    )
    print(f"the chain alone, two threads        {alone:8.3f} s   {rows / alone / 1e6:6.2f} Mrow/s")
    print(f"the chain alone, one thread         {one:8.3f} s   {rows / one / 1e6:6.2f} Mrow/s")
    print(f"ratio straightforward / screen      {plain / screened:8.1f}")
    print(f"ratio straightforward / chain       {plain / alone:8.1f}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000)
