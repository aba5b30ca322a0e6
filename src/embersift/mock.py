"""An invented population of dwarfs, for the demo and for benchmarks. Never physics of the chain.

The scenario is the Tern Shoal, a loose group of dwarf galaxies near redshift 0.05. It does not
exist. Recipes behind the numbers:

- black hole against stellar mass: Reines & Volonteri 2015, ApJ 813, 82 (from memory);
- everything else (star-forming sequence, metallicities, sizes, share of galaxies with a hole,
  accretion rates, share of bad rows) is invented and simple.

Rows come in blocks of fixed length, each with its own counter-based stream, so the first rows of
a long table are those of a short one with the same seed.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, TypeVar

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array
from embersift.constants import EDDINGTON_PER_MSUN, RATE_TO_LUMINOSITY

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["INVENTED", "UNITS", "blocks", "population"]

INVENTED = "invented population (the Tern Shoal, which does not exist); made by embersift mock"
N = TypeVar("N", bound=np.generic)

UNITS = {
    "mstar": "Msun",
    "sfr": "Msun / yr",
    "mbh": "Msun",
    "mdot": "Msun / yr",
    "offset": "kpc",
    "rhalf": "kpc",
}
_BLOCK = 65536


def population(rows: int, seed: int) -> pd.DataFrame:
    """The first `rows` rows of the population with this seed."""
    import pandas as pd

    return pd.concat(list(blocks(rows, seed)), ignore_index=True)


def blocks(rows: int, seed: int) -> Iterator[pd.DataFrame]:
    """The population in blocks of at most 65,536 rows."""
    for start in range(0, rows, _BLOCK):
        yield _block(start, seed).iloc[: rows - start]


def _block(start: int, seed: int) -> pd.DataFrame:
    import pandas as pd

    draw = np.random.Generator(np.random.Philox(key=seed, counter=[0, 0, 0, start // _BLOCK]))
    n = _BLOCK
    # a galaxy with a second, wandering hole takes two rows that share host, mass, rate, ...
    second = np.zeros(n, dtype=bool)
    second[1:] = draw.random(n - 1) < 0.12
    second[2:] &= ~second[1:-1]
    galaxy = np.cumsum(~second) - 1

    def per_galaxy(values: NDArray[N]) -> NDArray[N]:
        return np.take(values, galaxy)

    log_mstar = 7.0 + 3.6 * draw.beta(1.3, 1.8, n)
    quenched = draw.random(n) < 0.15
    log_sfr = -1.0 + 0.85 * (log_mstar - 9.0) + 0.35 * draw.standard_normal(n) - 1.6 * quenched
    sfr = np.where(draw.random(n) < 0.02, 0.0, 10.0**log_sfr)
    oh12 = 8.69 + 0.32 * (log_mstar - 10.0) + 0.10 * draw.standard_normal(n)
    oh12[draw.random(n) < 0.08] = np.nan
    redshift = 0.05 + 0.003 * draw.standard_normal(n)
    rhalf = 10.0 ** (0.25 + 0.25 * (log_mstar - 9.0) + 0.15 * draw.standard_normal(n))
    occupied = draw.random(n) < np.clip(0.25 + 0.28 * (log_mstar - 7.0), 0.0, 1.0)

    log_mstar, sfr, oh12 = per_galaxy(log_mstar), per_galaxy(sfr), per_galaxy(oh12)
    redshift, rhalf = per_galaxy(redshift), per_galaxy(rhalf)
    log_mbh = 7.45 + 1.05 * (log_mstar - 11.0) + 0.55 * draw.standard_normal(n)
    mbh = np.where(per_galaxy(occupied) | second, 10.0 ** np.maximum(log_mbh, 3.0), 0.0)
    mbh[second] *= 0.2
    eddington = 10.0 ** (-1.9 + 1.1 * draw.standard_normal(n))
    mdot = np.minimum(eddington, 3.0) * mbh * EDDINGTON_PER_MSUN / (0.1 * RATE_TO_LUMINOSITY)
    mdot[draw.random(n) < 0.12] = 0.0
    mdot[mbh == 0.0] = 0.0
    offset = np.where(second, rhalf * draw.gamma(2.0, 0.6, n), 0.0)

    mstar = 10.0**log_mstar
    # a few rows of every table are bad on purpose, each in its own way
    flaw = draw.random(n)
    mstar[flaw < 0.0008] *= -1.0
    sfr[(flaw >= 0.0008) & (flaw < 0.0016)] = np.nan
    mdot[(flaw >= 0.0016) & (flaw < 0.0024)] = np.inf
    redshift[(flaw >= 0.0024) & (flaw < 0.0032)] = 0.0

    index = start + np.arange(n)
    host = start + galaxy
    return pd.DataFrame(
        {
            "id": [f"invented-{i + 1:06d}" for i in index],
            "host_id": [f"shoal-{h + 1:06d}" for h in host],
            "mstar": _digits(mstar),
            "sfr": _digits(sfr),
            "oh12": np.round(oh12, 3),
            "mbh": _digits(mbh),
            "mdot": _digits(mdot),
            "redshift": np.round(redshift, 5),
            "offset": _digits(offset),
            "rhalf": _digits(rhalf),
        }
    )


def _digits(values: Array, digits: int = 5) -> Array:
    """Round to significant digits, so that the demo is a table a person can read."""
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = 10.0 ** (digits - 1 - np.floor(np.log10(np.abs(values))))
        rounded = np.round(values * scale) / scale
    return np.where(np.isfinite(rounded), rounded, values)
