"""From the inflow rate to the bolometric luminosity.

Every formula takes the rate at which mass flows in, in units of L_Edd/c2, and returns
L_bol / L_Edd. Published Eddington rates are plain factors of that unit:

==================== ============ =================================================
Eddington rate       rate / mdot  used by
==================== ============ =================================================
L_Edd / c2           1            embersift, inside
10 L_Edd / c2        10           xie2012, inayoshi2019, and f of two-regime, merloni2008 (eps 0.1)
16 L_Edd / c2        16           madau2014
==================== ============ =================================================

The rate is the inflow. A rate of growth is turned into inflow, 1/(1-eps), before it comes here,
so no formula below carries that factor.

Examples
--------
>>> import numpy as np
>>> from embersift.laws.declaration import Disc
>>> law = ACCRETION["two-regime"]
>>> law.eddington_ratio(np.array([0.01, 1.0, 5.0]), Disc(efficiency=0.1)).round(9).tolist()
[1e-05, 0.1, 0.5]
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from embersift.laws.declaration import AccretionLaw
from embersift.laws.discs import (
    CONSTANT,
    ISCO,
    MADAU2014,
    MERLONI2008,
    TWO_REGIME,
    isco_efficiency,
    isco_radius,
)
from embersift.laws.hot_flow import INAYOSHI2019, XIE2012

__all__ = ["ACCRETION", "isco_efficiency", "isco_radius"]

ACCRETION: Mapping[str, AccretionLaw] = MappingProxyType(
    {
        law.name: law
        for law in (
            CONSTANT,
            TWO_REGIME,
            MERLONI2008,
            XIE2012,
            ISCO,
            MADAU2014,
            INAYOSHI2019,
        )
    }
)
"""The accretion laws by name."""
