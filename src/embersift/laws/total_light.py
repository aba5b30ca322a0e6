"""All of the host's light in one number: binaries and hot gas that cannot be told apart."""

from __future__ import annotations

from embersift.bands import HARD, Band
from embersift.laws.declaration import Check, Coefficient, Part, Range, Source
from embersift.laws.two_terms import AS_SEEN, two_term_law

__all__ = ["BRORBY2016", "MINEO2014", "RANALLI2003"]

_BROAD = Band(0.5, 8.0)
_ALL: tuple[Part, ...] = ("hmxb", "lmxb", "gas")

BRORBY2016 = two_term_law(
    "brorby2016",
    summary="all the light of metal-poor starbursts, brighter at low O/H",
    source=Source(
        "Brorby M. et al., 2016, MNRAS, 457, 4081", 2016, doi="10.1093/mnras/stw284",
        arxiv="1602.01091",
    ),
    coefficients={
        "log_per_sfr": Coefficient.symmetric(39.49, 0.09, "MEM"),
        "sfr_oh12_slope": Coefficient.symmetric(-0.59, 0.13, "MEM"),
    },
    band=_BROAD,
    imf="salpeter",
    light=_ALL,
    ranges=(Range("oh12", 8.15, 8.80, "V-abs", "the Lyman-break analogues of the sample"),),
    scatter_dex=0.34,
    status="MEM",
    status_note=(
        "the plane and its scatter are from memory. Verified in the abstract: Lyman-break "
        "analogues at O/H 8.15 to 8.80 have log L/SFR = 39.85 +- 0.10 with 0.25 dex dispersion. "
        f"High-mass binaries and any hot gas together. {AS_SEEN}"
    ),
    outside="Goes on as a power of O/H; the row is marked",
    checks=(
        Check(
            {"sfr": 0.3, "oh12": 8.2}, "lx", 10**39.256, 1.5e-3,
            "check value of the coefficient sheet (CALC)",
        ),
    ),
)  # fmt: skip

MINEO2014 = two_term_law(
    "mineo2014",
    summary="all the light of star-forming galaxies, two thirds of it from high-mass binaries",
    source=Source(
        "Mineo S. et al., 2014, MNRAS, 437, 1698", 2014, doi="10.1093/mnras/stt1999",
        status="V-abs",
    ),
    coefficients={"per_sfr": Coefficient.symmetric(4.0e39, 0.4e39, "V-abs")},
    band=_BROAD,
    imf="salpeter",
    light=_ALL,
    ranges=(Range("redshift", high=1.3, status="V-abs", note="no evolution seen up to here"),),
    scatter_dex=0.4,
    scatter_status="V-abs",
    status="V-abs",
    status_note=f"from the abstract. {AS_SEEN}",
    outside="Goes on in proportion; the row is marked beyond redshift 1.3",
    checks=(Check({"sfr": 1.0}, "lx", 4.0e39, 1e-12, "the abstract (V-abs)"),),
)  # fmt: skip

RANALLI2003 = two_term_law(
    "ranalli2003",
    summary="all the light of nearby star-forming galaxies",
    source=Source("Ranalli P., Comastri A., Setti G., 2003, A&A, 399, 39", 2003, status="MEM"),
    coefficients={"per_sfr": Coefficient(1 / 2.0e-40, status="MEM")},
    band=HARD,
    imf="salpeter",
    light=_ALL,
    status="MEM",
    status_note=f"from memory; published the other way round, SFR = 2.0e-40 L. {AS_SEEN}",
    outside="Goes on in proportion. No range is stated, so no row is marked",
    checks=(Check({"sfr": 1.0}, "lx", 5.0e39, 1e-12, "1 / 2.0e-40 (CALC)"),),
)
