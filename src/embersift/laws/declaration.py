"""What a law is: a published relation declared as data, with its formula, in one place.

Every law embersift can use is one object of this module. The tables in ``docs/laws.md``, the
output of ``embersift laws`` and the marks in the column ``stretched`` are all made from it, so
a number is typed once. A coefficient carries its published error (issue: shared errors move all
rows together) and the status of its verification:

======== ==========================================================
V        verified in a public place
V-abs    verified in the abstract of the paper
CALC     computed from the stated formula
MEM      from memory, not verified against the paper
PRACTICE common practice, no source
======== ==========================================================
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal, NamedTuple, TypeAlias

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array
from embersift.bands import Band
from embersift.errors import LawError

__all__ = [
    "IMF",
    "AccretionLaw",
    "Array",
    "BackgroundLaw",
    "Band",
    "BolometricLaw",
    "Check",
    "Coefficient",
    "Coefficients",
    "Disc",
    "Host",
    "Law",
    "Part",
    "Range",
    "Source",
    "Status",
]

Coefficients: TypeAlias = Mapping[str, float]
Status: TypeAlias = Literal["V", "V-abs", "CALC", "MEM", "PRACTICE"]
IMF: TypeAlias = Literal["salpeter", "kroupa", "chabrier"]
Part: TypeAlias = Literal["hmxb", "lmxb", "gas", "total"]


@dataclass(frozen=True)
class Source:
    """Where a law was published. Fields that are not known for sure stay empty."""

    citation: str
    year: int
    doi: str = ""
    arxiv: str = ""
    bibcode: str = ""
    status: Status = "V"


@dataclass(frozen=True)
class Coefficient:
    """A published number with its 1 sigma errors (NaN where none was published or known)."""

    value: float
    minus: float = float("nan")
    plus: float = float("nan")
    status: Status = "V"
    error_status: Status = "V"
    meaning: str = ""

    @classmethod
    def symmetric(
        cls,
        value: float,
        error: float,
        status: Status = "V",
        error_status: Status | None = None,
        meaning: str = "",
    ) -> Coefficient:
        return cls(value, error, error, status, error_status or status, meaning)


@dataclass(frozen=True)
class Range:
    """The calibrated range of one input; outside it the row is marked `stretched`.

    `quantity` is one of the names a law sees: ``lbol`` [erg/s], ``eddington_ratio``, ``mbh``
    [Msun], ``mdot`` (inflow in units of L_Edd/c2), ``mstar`` [Msun], ``sfr`` [Msun/yr] (both in
    the law's own IMF), ``oh12``, ``redshift``, ``spin``.
    """

    quantity: str
    low: float = float("-inf")
    high: float = float("inf")
    status: Status = "MEM"
    note: str = ""


@dataclass(frozen=True)
class Check:
    """One value that the formula must give: inputs by name, the expected value, where it is from.

    `inputs` uses the names of `Range.quantity`, plus ``band`` (``hard`` or ``soft``) for
    bolometric laws, ``part`` for background laws and ``efficiency``, ``spin``, ``delta`` for
    accretion laws. `quantity` names what is compared.
    """

    inputs: Mapping[str, Any]
    quantity: str
    expected: float
    rtol: float
    source: str


@dataclass(frozen=True, kw_only=True)
class Law:
    """What every law has, whatever it describes."""

    name: str
    summary: str
    source: Source
    formula_text: str
    coefficients: Mapping[str, Coefficient] = field(default_factory=dict)
    ranges: tuple[Range, ...] = ()
    scatter_dex: float | None = None
    scatter_status: Status = "MEM"
    status: Status = "V"
    status_note: str = ""
    outside: str = ""  # what the formula does outside its range, in words
    checks: tuple[Check, ...] = ()

    @property
    def kind(self) -> str:
        raise NotImplementedError

    @property
    def values(self) -> Coefficients:
        """The central values of the coefficients, as the formula takes them."""
        return MappingProxyType({name: c.value for name, c in self.coefficients.items()})

    def stretched(self, **quantities: Array) -> NDArray[np.bool_]:
        """Mark where a known quantity lies outside the calibrated range.

        Parameters
        ----------
        **quantities : arrays of one shape
            Inputs by the names of `Range.quantity`; those without a declared range are ignored.

        Returns
        -------
        bool array
            False where the input is NaN: a missing value is not a stretched law.
        """
        shape = np.broadcast_shapes(*(np.shape(value) for value in quantities.values()))
        mark = np.zeros(shape, dtype=bool)
        for span in self.ranges:
            if span.quantity in quantities:
                value = quantities[span.quantity]
                if span.low > -np.inf:
                    mark |= value < span.low
                if span.high < np.inf:
                    mark |= value > span.high
        return mark


class Disc(NamedTuple):
    """The choices an accretion law may need besides the rate."""

    efficiency: float = 0.1
    spin: float = 0.0
    delta: float = 0.1  # share of the turbulent heating that goes to electrons (xie2012)


@dataclass(frozen=True, kw_only=True)
class AccretionLaw(Law):
    """Inflow rate to bolometric luminosity.

    ``formula(rate, coefficients, disc)`` takes the inflow rate in units of L_Edd/c2 (so that
    every published Eddington rate is a plain factor: 10 L_Edd/c2 is ``rate / 10``) and returns
    L_bol / L_Edd.
    """

    formula: Callable[[Array, Coefficients, Disc], Array]

    @property
    def kind(self) -> str:
        return "accretion"

    def eddington_ratio(
        self, rate: Array, disc: Disc, coefficients: Coefficients | None = None
    ) -> Array:
        """L_bol / L_Edd for an inflow rate in units of L_Edd/c2."""
        return self.formula(rate, self.values if coefficients is None else coefficients, disc)


@dataclass(frozen=True, kw_only=True)
class BolometricLaw(Law):
    """Bolometric luminosity to X-ray luminosity.

    ``formula(lbol, eddington_ratio, mbh, coefficients)`` returns k = L_bol / L_band. The same
    formula serves the hard (2-10 keV) and the soft (0.5-2 keV) band with other coefficients;
    a law published for one band only leaves `soft_coefficients` empty.
    """

    formula: Callable[[Array, Array, Array, Coefficients], Array]
    soft_coefficients: Mapping[str, Coefficient] = field(default_factory=dict)
    soft_scatter_dex: float | None = None
    template_gamma: float | None = None

    @property
    def kind(self) -> str:
        return "bolometric"

    @property
    def soft_values(self) -> Coefficients:
        if not self.soft_coefficients:
            raise LawError(
                f"{self.name} was published for 2-10 keV only. "
                'Set agn.anchor = "hard", or choose a law with a soft band.'
            )
        return MappingProxyType({name: c.value for name, c in self.soft_coefficients.items()})


class Host(NamedTuple):
    """What a background law sees of a galaxy, already in the law's own IMF."""

    mstar: Array  # Msun
    sfr: Array  # Msun / yr
    oh12: Array  # 12 + log(O/H); NaN where unknown
    z: Array
    age: float = float("nan")  # mean stellar age [Gyr]


@dataclass(frozen=True, kw_only=True)
class BackgroundLaw(Law):
    """The host's own X-rays, in the law's band and IMF.

    ``formula(host, coefficients)`` returns luminosities [erg/s] by part. A law whose parts can
    be told apart returns them under ``hmxb``, ``lmxb``, ``gas``; one that cannot returns
    ``total`` alone. `light` says what the law's number contains, so that no light is counted
    twice: a law with gas in it is never added to a gas law.
    """

    formula: Callable[[Host, Coefficients], Mapping[Part, Array]]
    band: Band
    imf: IMF
    light: frozenset[Part]  # of hmxb, lmxb, gas: what is in the number
    separable: bool = True
    metallicity: str = ""  # scale that the formula takes, empty when it takes none
    needs_oh12: bool = False
    needs_age: bool = False
    apparent: bool = True  # as seen through the host's own gas; False: corrected for it

    @property
    def kind(self) -> str:
        if "gas" in self.light and len(self.light) > 1:
            return "total"
        if "gas" in self.light:
            return "gas"
        return "binaries"
