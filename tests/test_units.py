"""Unit strings against astropy's own unit arithmetic, and the messages of those that fail."""

import numpy as np
import pytest
from astropy import constants
from hypothesis import given, settings
from hypothesis import strategies as st

from embersift.errors import CatalogueError
from embersift.units import conversion


@pytest.mark.parametrize(
    ("unit", "wanted", "h", "value", "expected"),
    [
        ("1e10 Msun", "Msun", None, 0.5, 5e9),
        ("1e10 Msun / littleh", "Msun", 0.7, 0.7, 1e10),
        ("Msun / littleh", "Msun", 0.5, 1.0, 2.0),
        ("dex(Msun)", "Msun", None, 9.0, 1e9),
        ("dex(1e10 Msun / littleh)", "Msun", 0.7, 0.0, 1e10 / 0.7),
        ("Msun / Gyr", "Msun / yr", None, 1e9, 1.0),
        ("kpc", "Mpc", None, 1000.0, 1.0),
        ("kg", "Msun", None, constants.M_sun.value, 1.0),
        ("g / s", "Msun / yr", None, constants.M_sun.cgs.value / (365.25 * 86400), 1.0),
        ("m-2", "cm-2", None, 1e26, 1e22),
        ("", "Msun", None, 3.0, 3.0),
    ],
)
def test_units_convert_as_the_constants_say(unit, wanted, h, value, expected):
    got = conversion(unit, wanted, h, "column")(np.array([value]))
    assert got[0] == pytest.approx(expected, rel=1e-12)


def test_log_of_zero_is_zero():
    assert conversion("dex(Msun)", "Msun", None, "mdot")(np.array([-np.inf]))[0] == 0.0


@settings(max_examples=50, deadline=None)
@given(log=st.floats(-12, 14), h=st.floats(0.4, 1.0))
def test_every_notation_of_one_mass_gives_the_same_mass(log, h):
    value = 10.0**log
    readings = [
        conversion("", "Msun", h, "m")(np.array([value])),
        conversion("dex(Msun)", "Msun", h, "m")(np.array([log])),
        conversion("1e10 Msun", "Msun", h, "m")(np.array([value / 1e10])),
        conversion("1e10 Msun / littleh", "Msun", h, "m")(np.array([value / 1e10 * h])),
    ]
    np.testing.assert_allclose([r[0] for r in readings], value, rtol=1e-12)


@pytest.mark.parametrize(
    ("unit", "wanted", "h", "words"),
    [
        ("Msun / littleh", "Msun", None, "catalogue.h"),
        ("1e10 Msun/h", "Msun", None, "h is the hour"),
        ("parsecs_per_fortnight", "Msun", None, "is not a unit"),
        ("kpc", "Msun", None, "does not convert to Msun"),
        ("mag(Msun)", "Msun", None, "galaxies.csv: column 'm'"),
    ],
)
def test_a_unit_that_does_not_serve_is_explained(unit, wanted, h, words):
    with pytest.raises(CatalogueError, match=words.replace("(", r"\(").replace(".", r"\.")):
        conversion(unit, wanted, h, "galaxies.csv: column 'm'")
