"""Effective areas: the file, what is wrong with bad ones, and counts per flux."""

import math
from itertools import pairwise

import numpy as np
import pytest
from astropy import constants, units
from astropy.io import fits
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from embersift.bands import Band
from embersift.effective_area import (
    EffectiveArea,
    counts_per_flux,
    mean_area,
    photons_per_energy,
    read_effective_area,
)
from embersift.errors import RecipeError
from embersift.sky.absorption import EDGES, cross_section

EDGE = np.linspace(0.3, 10.0, 98)
AREA = 600.0 * np.exp(-0.5 * (np.log(0.5 * (EDGE[1:] + EDGE[:-1]) / 1.5) / 0.8) ** 2)
ERG_PER_KEV = constants.e.si.value * 1e10  # 1 eV = e joule


def write(path, low=EDGE[:-1], high=EDGE[1:], area=AREA, name="SPECRESP", **columns):
    kept = {
        "ENERG_LO": (low, "keV"),
        "ENERG_HI": (high, "keV"),
        "SPECRESP": (area, "cm**2"),
    } | columns
    table = fits.BinTableHDU.from_columns(
        [
            fits.Column(key, "E" if np.asarray(values).ndim == 1 else "2E", unit, array=values)
            for key, (values, unit) in kept.items()
            if values is not None
        ],
        name=name,
    )
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)
    return path


def integral(function, low, high, breaks=()):
    """Adaptive quadrature, stopped at every break."""
    at = sorted({low, high, *(b for b in breaks if low < b < high)})
    return sum(quad(function, a, b, epsabs=0.0, epsrel=1e-10)[0] for a, b in pairwise(at))


def test_a_file_is_read_as_it_was_written(tmp_path):
    found = read_effective_area(write(tmp_path / "area.fits"))
    np.testing.assert_allclose(found.energy_low, EDGE[:-1], rtol=1e-6)
    np.testing.assert_allclose(found.energy_high, EDGE[1:], rtol=1e-6)
    np.testing.assert_allclose(found.area, AREA, rtol=1e-6)


def test_units_are_converted_and_lower_case_names_read(tmp_path):
    path = write(
        tmp_path / "area.fits.gz",
        low=None,
        energ_lo=(EDGE[:-1] * 1e3, "eV"),
        ENERG_HI=(EDGE[1:], None),
        SPECRESP=(AREA * 1e-4, "m2"),
    )
    found = read_effective_area(path)
    np.testing.assert_allclose(found.energy_low, EDGE[:-1], rtol=1e-6)
    np.testing.assert_allclose(found.area, AREA, rtol=1e-6)


def test_rows_that_run_downwards_are_turned(tmp_path):
    path = write(tmp_path / "area.fits", EDGE[-2::-1], EDGE[:0:-1], AREA[::-1])
    np.testing.assert_allclose(read_effective_area(path).area, AREA, rtol=1e-6)


def changed(values, row, value):
    values = values.copy()
    values[row] = value
    return values


@pytest.mark.parametrize(
    ("columns", "message"),
    [
        ({"low": np.delete(EDGE[:-1], 40), "high": np.delete(EDGE[1:], 40),
          "area": np.delete(AREA, 40)}, r"gap between the bins 4.2-4.3 and 4.4-4.5 keV \(1 in all"),
        ({"high": changed(EDGE[1:], 7, 1.15)}, "bins overlap between the bins 1-1.15 and 1.1-1.2"),
        ({"high": changed(EDGE[1:], 7, 0.9)}, r"ENERG_HI is not above ENERG_LO in 1 .*\(rows 8\)"),
        ({"area": changed(AREA, [2, 5], -1.0)}, r"SPECRESP is negative in 2 of 97 .*\(rows 3, 6\)"),
        ({"area": changed(AREA, 0, np.nan)}, "SPECRESP is missing or not finite"),
        ({"low": changed(EDGE[:-1], 0, -0.1)}, "ENERG_LO is negative"),
        ({"area": None}, "no column SPECRESP"),
        ({"area": None, "SPECRES": (AREA, "cm2")}, "no column SPECRESP. Did you mean SPECRES?"),
        ({"SPECRESP": (AREA, "keV")}, "column SPECRESP has unit 'keV'"),
        ({"ENERG_LO": (EDGE[:-1], "Angstrom")}, "column ENERG_LO has unit 'Angstrom'"),
        ({"area": np.stack((AREA, AREA), axis=1)}, "one number a row"),
        ({"low": EDGE[:0], "high": EDGE[:0], "area": AREA[:0]}, "SPECRESP|one number a row"),
    ],
)  # fmt: skip
def test_bad_files_are_refused_with_the_reason(tmp_path, columns, message):
    path = write(tmp_path / "area.fits", **columns)
    with pytest.raises(RecipeError, match=message) as error:
        read_effective_area(path)
    assert str(path) in str(error.value)


def test_a_file_without_the_extension_names_what_it_holds(tmp_path):
    path = write(tmp_path / "matrix.fits", name="SPECRESP MATRIX")
    with pytest.raises(RecipeError, match=r"no SPECRESP tables.*SPECRESP MATRIX"):
        read_effective_area(path)


def test_a_file_that_is_missing_or_not_fits_is_refused(tmp_path):
    with pytest.raises(RecipeError, match="There is no effective area file"):
        read_effective_area(tmp_path / "none.fits")
    text = tmp_path / "area.txt"
    text.write_text("0.3 0.4 100\n")
    with pytest.raises(RecipeError, match="cannot be read as FITS"):
        read_effective_area(text)


def area_of(low=EDGE[:-1], high=EDGE[1:], area=AREA):
    return EffectiveArea(np.array(low), np.array(high), np.array(area))


def test_a_band_outside_the_file_is_refused():
    with pytest.raises(RecipeError, match=r"covers 0.3-10 keV.*band 0.2-2 keV"):
        mean_area(area_of(), Band(0.2, 2.0), 1.8)


def test_no_area_in_the_band_is_refused():
    dark = np.where(EDGE[:-1] < 2.0, 0.0, AREA)
    with pytest.raises(RecipeError, match=r"area is 0 all over 0.5-1.5 keV"):
        counts_per_flux(area_of(area=dark), Band(0.5, 1.5), 1.8)


def test_an_area_is_frozen():
    with pytest.raises(ValueError, match="read-only"):
        area_of().area[0] = 1.0


@given(gamma=st.floats(-1.0, 4.0), low=st.floats(0.3, 4.0), width=st.floats(0.05, 5.0))
@settings(max_examples=60, deadline=None)
def test_counts_per_flux_is_the_integral_over_the_steps_of_the_area(gamma, low, width):
    band = Band(low, low + width)
    step = lambda e: AREA[np.clip(np.searchsorted(EDGE, e, side="right") - 1, 0, AREA.size - 1)]  # noqa: E731
    photons = integral(lambda e: step(e) * e**-gamma, band.low, band.high, EDGE)
    energy = integral(lambda e: e ** (1.0 - gamma), band.low, band.high) * ERG_PER_KEV
    assert counts_per_flux(area_of(), band, gamma) == pytest.approx(photons / energy, rel=1e-8)


def test_constant_area_is_its_own_mean():
    for gamma in (0.0, 1.0, 1.8, 2.0, 3.0):
        assert mean_area(area_of(area=np.full(97, 321.0)), Band(0.5, 7.0), gamma) == pytest.approx(
            321.0, rel=1e-13
        )


def test_photons_per_energy_of_a_narrow_band_is_one_photon_of_its_energy():
    expected = 1.0 / (3.0 * units.keV).to_value(units.erg)
    assert photons_per_energy(Band(2.9999, 3.0001), 1.8) == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("nh", [1e20, 1e21, 1e22])
def test_absorbed_counts_per_flux_is_the_integral_between_the_edges(nh):
    band, gamma = Band(0.5, 8.0), 1.8

    def through(energy):
        return np.exp(-nh * cross_section(np.asarray(energy)))

    def spectrum(power):
        return lambda e: float(through(np.array([e]))[0]) * e**-power

    breaks = {*EDGES.tolist(), *EDGE.tolist()}
    photons = sum(
        area * integral(spectrum(gamma), max(lo, band.low), min(hi, band.high), breaks)
        for lo, hi, area in zip(EDGE[:-1], EDGE[1:], AREA, strict=True)
        if hi > band.low and lo < band.high
    )
    energy = integral(spectrum(gamma - 1.0), band.low, band.high, breaks) * ERG_PER_KEV
    found = counts_per_flux(area_of(), band, gamma, through)
    assert found == pytest.approx(photons / energy, rel=1e-4)


def test_a_grey_screen_changes_nothing_per_observed_flux():
    band = Band(0.5, 2.0)
    clear = counts_per_flux(area_of(), band, 1.8)
    grey = counts_per_flux(area_of(), band, 1.8, lambda e: np.full(e.shape, 0.25))
    assert grey == pytest.approx(clear, rel=1e-12)


def test_a_screen_that_nothing_passes_is_refused():
    with pytest.raises(RecipeError, match="No photon"):
        counts_per_flux(area_of(), Band(0.5, 2.0), 1.8, np.zeros_like)
    with pytest.raises(RecipeError, match="No photon"):
        photons_per_energy(Band(0.5, 2.0), 1.8, np.zeros_like)


def test_coarse_bins_are_sampled_as_finely_as_narrow_ones():
    coarse = area_of([0.3, 3.0], [3.0, 10.0], [100.0, 100.0])
    fine = area_of(area=np.full(97, 100.0))

    def through(energy):
        return np.exp(-3e21 * cross_section(energy))

    band = Band(0.4, 9.0)
    assert mean_area(coarse, band, 1.8, through) == pytest.approx(100.0, rel=1e-12)
    assert counts_per_flux(coarse, band, 1.8, through) == pytest.approx(
        counts_per_flux(fine, band, 1.8, through), rel=1e-4
    )


def test_rounded_energies_are_no_gaps():
    low, high = EDGE[:-1].astype(np.float32), np.round(EDGE[1:], 4)
    assert area_of(low, high).area.size == 97
    assert math.isfinite(mean_area(area_of(low, high), Band(0.3, 10.0), 1.8))
