"""Flux limits of well-known surveys, by name: a convenience, not a calibration.

Names are the survey with the band's place: ``cdfs-7ms-soft``, ``cdfs-7ms-hard``,
``cdfs-7ms-full``. The plain survey name, ``cdfs-7ms``, is its soft band. Soft is 0.5-2 keV in all
surveys; where hard and full begin and end differs and is part of the preset.

A limit belongs to a place in a survey, to a definition of detected and to a spectrum, so every one
of these stands for the survey's depth only roughly. A limit that the user states always wins.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING

from embersift.bands import HARD, SOFT, Band
from embersift.errors import RecipeError, did_you_mean

if TYPE_CHECKING:
    from embersift.laws.declaration import Status

__all__ = ["DEPTHS", "Depth", "depth", "lines"]

_ALL_SKY = 41253.0  # deg2
_WIDTH = 80


@dataclass(frozen=True)
class Depth:
    """The depth of a survey in one band, for point sources.

    `status` is that of the flux limit (see `embersift.laws.declaration`). `approximate` is False
    only where the number is known to be the one the paper states.
    """

    name: str
    band: Band
    flux_limit: float  # erg/s/cm2
    area: float  # deg2
    paper: str
    status: Status
    approximate: bool
    note: str = ""

    @property
    def survey(self) -> str:
        """The plain name, shared by the bands of one survey."""
        return self.name.rpartition("-")[0]

    def __str__(self) -> str:
        about = "~" if self.approximate else ""
        return (
            f"{self.name}: {about}{self.flux_limit:.2g} erg/s/cm2 in {self.band}, "
            f"{self.paper} ({self.status})"
        )


def _survey(
    survey: str,
    area: float,
    paper: str,
    status: Status,
    limits: Mapping[str, tuple[Band, float]],
    note: str = "",
) -> Iterator[Depth]:
    for place, (band, limit) in limits.items():
        # a number from memory is at best the paper's, rounded
        approximate = status == "MEM"
        yield Depth(f"{survey}-{place}", band, limit, area, paper, status, approximate, note)


_ALL = (
    *_survey(
        "erass1",
        0.5 * _ALL_SKY,
        "Merloni et al. 2024, A&A 682, A34",
        "MEM",
        {"soft": (SOFT, 5e-14)},
        "half the sky; its main catalogue is of 0.2-2.3 keV",
    ),
    *_survey(
        "erass8",
        _ALL_SKY,
        "Predehl et al. 2021, A&A 647, A1",
        "MEM",
        {"soft": (SOFT, 1.1e-14)},
        "the planned depth of eight passes over the whole sky, not a reached one",
    ),
    *_survey(
        "efeds",
        140.0,
        "Brunner et al. 2022, A&A 661, A1",
        "MEM",
        {"soft": (SOFT, 6.5e-15)},
        "the area is verified in the paper's abstract, the limit is not",
    ),
    *_survey(
        "cosmos-legacy",
        2.2,
        "Civano et al. 2016, ApJ 819, 62",
        "V-abs",
        {
            "soft": (SOFT, 2.2e-16),
            "hard": (HARD, 1.5e-15),
            "full": (Band(0.5, 10.0), 8.9e-16),
        },
        "the limits of the paper's abstract",
    ),
    *_survey(
        "xxl",
        50.0,
        "Chiappetti et al. 2018, A&A 620, A12",
        "V-abs",
        {"soft": (SOFT, 1e-15), "hard": (HARD, 3e-15)},
        "3 sigma; two fields of 25 deg2",
    ),
    *_survey(
        "xxl-90",
        50.0,
        "Chiappetti et al. 2018, A&A 620, A12",
        "V-abs",
        {"soft": (SOFT, 5.8e-15), "hard": (HARD, 3.8e-14)},
        "90 % completeness; two fields of 25 deg2",
    ),
    *_survey(
        "stripe82x",
        31.0,
        "LaMassa et al. 2016, ApJ 817, 172",
        "MEM",
        {"soft": (SOFT, 8.7e-16), "hard": (HARD, 4.7e-15)},
    ),
    *_survey(
        "aegis-xd",
        0.29,
        "Nandra et al. 2015, ApJS 220, 10",
        "MEM",
        {"soft": (SOFT, 5e-17), "hard": (HARD, 2e-16)},
    ),
    *_survey(
        "cdfs-7ms",
        484.2 / 3600.0,
        "Luo et al. 2017, ApJS 228, 2",
        "V-abs",
        {
            "soft": (SOFT, 6.4e-18),
            "hard": (Band(2.0, 7.0), 2.7e-17),
            "full": (Band(0.5, 7.0), 1.9e-17),
        },
        "limits of the central 1 arcmin2 at P_B < 0.007; the area is the whole field's, most of "
        "it shallower",
    ),
)

DEPTHS: Mapping[str, Depth] = MappingProxyType({preset.name: preset for preset in _ALL})
"""Every preset by its full name."""


def depth(name: str) -> Depth:
    """The preset of that name; a plain survey name means its soft band.

    Raises
    ------
    RecipeError
        If there is none, with the nearest names.

    Examples
    --------
    >>> print(depth("cdfs-7ms"))
    cdfs-7ms-soft: 6.4e-18 erg/s/cm2 in 0.5-2 keV, Luo et al. 2017, ApJS 228, 2 (V-abs)
    """
    found = DEPTHS.get(name) or DEPTHS.get(f"{name}-soft")
    if found is None:
        raise RecipeError(
            f"There is no reference depth {name!r}. {did_you_mean(name, DEPTHS)} "
            "`embersift depths` lists them; a limit of your own needs no name."
        )
    return found


def _area(area: float) -> str:
    return f"{area:.0f}" if area >= 1e3 else f"{area:.3g}"


def lines() -> list[str]:
    """The presets as text, no line longer than 80 characters."""
    row = "{:<19} {:<11} {:>16} {:>9}  {}".format
    text = [row("name", "band", "limit erg/s/cm2", "area deg2", "status")]
    for preset in DEPTHS.values():
        limit = f"{'~' if preset.approximate else ''}{preset.flux_limit:.2g}"
        text.append(
            row(preset.name, str(preset.band), limit, f"{_area(preset.area)}", preset.status)
        )
    text += ["", "Sources"]
    for survey, preset in {preset.survey: preset for preset in DEPTHS.values()}.items():
        note = f"; {preset.note}" if preset.note else ""
        text += textwrap.wrap(f"{survey}: {preset.paper}{note}.", _WIDTH, subsequent_indent="    ")
    closing = (
        "The plain name of a survey means its soft band. ~ marks a number from memory (status "
        "MEM: not verified; V-abs: verified in the paper's abstract). A survey is not equally deep "
        "all over: state your own limit where you know it, it always wins."
    )
    text += ["", *textwrap.wrap(closing, _WIDTH)]
    return text
