"""The columns embersift reads and writes, each declared once: name, unit, meaning, limits.

``docs/columns.md``, the reading of catalogues and the marks in `problem` are made from here.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Literal

__all__ = [
    "INPUT",
    "OUTPUT",
    "InputColumn",
    "OutputColumn",
    "fate_column",
    "odds_column",
    "output_columns",
]


@dataclass(frozen=True)
class InputColumn:
    """A quantity of the catalogue.

    `unit` is what the chain works in, in the syntax of FITS and VOUnit; `numeric` is False for
    identifiers, which stay text.
    """

    name: str
    unit: str
    need: Literal["yes", "no", "one of"]
    meaning: str
    numeric: bool = True


@dataclass(frozen=True)
class OutputColumn:
    """A column that a screening adds. Names in capitals stand for observation and threshold."""

    name: str
    unit: str
    meaning: str
    ucd: str = ""


INPUT: Mapping[str, InputColumn] = MappingProxyType(
    {
        column.name: column
        for column in (
            InputColumn(
                "id", "", "no", "any type, kept as given; the row number when absent", False
            ),
            InputColumn("host_id", "", "no", "groups the holes of one galaxy", False),
            InputColumn("mstar", "Msun", "yes", "stellar mass"),
            InputColumn("sfr", "Msun / yr", "yes", "star formation rate; 0 is valid"),
            InputColumn("oh12", "", "no", "12 + log(O/H); rows without it use another law"),
            InputColumn(
                "metallicity", "", "no", "instead of oh12, on the scale catalogue.metallicity"
            ),
            InputColumn("mbh", "Msun", "yes", "black-hole mass; 0 or missing: no black hole"),
            InputColumn(
                "mdot",
                "Msun / yr",
                "yes",
                "accretion rate (inflow or growth: catalogue.rate); 0: dormant",
            ),
            InputColumn("redshift", "", "one of", "cosmological redshift"),
            InputColumn(
                "distance", "Mpc", "one of", "luminosity distance; wins over redshift for fluxes"
            ),
            InputColumn("offset", "kpc", "no", "projected distance of the hole from the centre"),
            InputColumn("rhalf", "kpc", "no", "half-light radius of the galaxy"),
            InputColumn("nh", "cm-2", "no", "intrinsic column in front of the black hole"),
            InputColumn("weight", "", "no", "weight of the row in tallies"),
            InputColumn("volume", "Mpc3", "no", "comoving volume that the row stands for"),
        )
    }
)

OUTPUT: tuple[OutputColumn, ...] = (
    OutputColumn("lbol", "erg / s", "bolometric luminosity of the black hole", "phys.luminosity"),
    OutputColumn("eddington_ratio", "", "lbol over the Eddington luminosity", "arith.ratio"),
    OutputColumn(
        "lx_agn", "erg / s", "intrinsic black-hole light, rest 2-10 keV", "phys.luminosity;em.X-ray"
    ),
    OutputColumn(
        "lx_hmxb", "erg / s", "high-mass binaries, rest 2-10 keV", "phys.luminosity;em.X-ray"
    ),
    OutputColumn(
        "lx_lmxb", "erg / s", "low-mass binaries, rest 2-10 keV", "phys.luminosity;em.X-ray"
    ),
    OutputColumn("lx_gas", "erg / s", "hot gas, rest 2-10 keV", "phys.luminosity;em.X-ray"),
    OutputColumn(
        "lx_background",
        "erg / s",
        "all of the host's own light, rest 2-10 keV",
        "phys.luminosity;em.X-ray",
    ),
    OutputColumn("excess", "", "lx_agn over lx_background", "arith.ratio"),
    OutputColumn(
        "flux_agn_NAME",
        "erg / (s cm2)",
        "black hole's flux in the observed band, behind both columns",
        "phot.flux;em.X-ray",
    ),
    OutputColumn(
        "flux_background_NAME",
        "erg / (s cm2)",
        "the host's own flux in the observed band, behind the Galactic column",
        "phot.flux;em.X-ray",
    ),
    OutputColumn(
        "excess_NAME",
        "",
        "what the threshold is compared with: flux over background flux, by screen.criterion",
        "arith.ratio",
    ),
    OutputColumn("fate_NAME_T", "", "the verdict at threshold T", "meta.code"),
    OutputColumn(
        "odds_NAME_T",
        "",
        "probability of being visible at threshold T, given scatter and columns (when asked for)",
        "stat.probability",
    ),
    OutputColumn(
        "stretched",
        "",
        "laws used outside the range they were calibrated on, joined by |",
        "meta.note",
    ),
    OutputColumn(
        "problem", "", "column and reason, joined by ; - empty when all is well", "meta.note"
    ),
)


def output_columns(
    observations: Iterable[str], thresholds: Iterable[float], *, odds: bool = False
) -> tuple[OutputColumn, ...]:
    """The columns of one run in their order, NAME and T filled in."""
    thresholds = tuple(thresholds)
    by_name = {column.name: column for column in OUTPUT}
    columns = [c for c in OUTPUT if "NAME" not in c.name and c.name not in ("stretched", "problem")]
    fates: list[OutputColumn] = []
    chances: list[OutputColumn] = []
    for observation in observations:
        for template in ("flux_agn_NAME", "flux_background_NAME", "excess_NAME"):
            columns.append(replace(by_name[template], name=template.replace("NAME", observation)))
        for threshold in thresholds:
            name = fate_column(observation, threshold)
            fates.append(replace(by_name["fate_NAME_T"], name=name))
            if odds:
                chances.append(replace(by_name["odds_NAME_T"], name=odds_column(name)))
    return (*columns, *fates, *chances, by_name["stretched"], by_name["problem"])


def odds_column(fate: str) -> str:
    """Name of the odds that belong to a fate column.

    Examples
    --------
    >>> odds_column("fate_deep_2.5")
    'odds_deep_2.5'
    """
    return "odds" + fate.removeprefix("fate")


def fate_column(observation: str, threshold: float) -> str:
    """Name of the column that holds the verdict of one observation at one threshold.

    Examples
    --------
    >>> fate_column("any", 2.0)
    'fate_any_2'
    """
    return f"fate_{observation}_{format(threshold, '.10g')}"
