"""The host's hot gas, 0.5-2 keV; its spectrum is a choice of the recipe."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

import numpy as np

from embersift.arrays import Array
from embersift.bands import SOFT
from embersift.laws.declaration import (
    BackgroundLaw,
    Check,
    Coefficient,
    Coefficients,
    Host,
    Part,
    Range,
    Source,
)
from embersift.laws.two_terms import two_term_law

__all__ = ["GAS"]


def _no_gas(host: Host, c: Coefficients) -> Mapping[Part, Array]:
    return {"gas": np.zeros_like(host.sfr)}


_MINEO2012GAS = two_term_law(
    "mineo2012gas",
    summary="thermal part of the diffuse light of nearby star-forming galaxies",
    source=Source(
        "Mineo S., Gilfanov M., Sunyaev R., 2012, MNRAS, 426, 1870",
        2012,
        doi="10.1111/j.1365-2966.2012.21831.x",
        arxiv="1205.3715",
        status="V-abs",
    ),
    coefficients={"per_sfr": Coefficient(5.2e38, status="MEM")},
    band=SOFT,
    imf="salpeter",
    light=["gas"],
    ranges=(
        Range("sfr", 0.1, 17.0, "V-abs", "the sample"),
        Range("mstar", 3e8, 6e10, "V-abs", "the sample"),
    ),
    scatter_dex=0.34,
    status="MEM",
    status_note=(
        "apparent light, verified in the abstract: 8.3e38 SFR of diffuse light, 30 to 40 % of it "
        "faint compact sources; the thermal part, the IMF and the scatter are from memory "
        "(5.2 is 63 % of 8.3). Intrinsic light is far brighter and depends on the model"
    ),
    outside="Goes on in proportion to SFR; the row is marked",
    checks=(
        Check(
            {"sfr": 1.0, "part": "gas"},
            "lx",
            0.63 * 8.3e38,
            0.01,
            "the abstract: 8.3e38 per SFR, less 30-40 % of compact sources",
        ),
    ),
)

_NONE = BackgroundLaw(
    name="none",
    summary="no hot gas",
    source=Source("", 0, status="PRACTICE"),
    formula_text="0",
    formula=_no_gas,
    band=SOFT,
    imf="kroupa",
    light=frozenset({"gas"}),
    status="PRACTICE",
    outside="The same everywhere",
    checks=(Check({"sfr": 1.0, "part": "gas"}, "lx", 0.0, 0.0, "no gas, no light"),),
)

GAS: Mapping[str, BackgroundLaw] = MappingProxyType(
    {law.name: law for law in (_MINEO2012GAS, _NONE)}
)
"""The laws of hot gas by name."""
