"""Code units: CODATA constants, the nominal Sun of the IAU, and Astropy as an independent converter."""

from __future__ import annotations

import math

import pytest
from astropy import constants, units
from scipy import constants as codata

from fieldmover.conventions.units import SCALES, CodeUnits, code_units, size_of
from fieldmover.errors import JobError

STAR = CodeUnits(length=6.96e10, mass=1.5e33, time=1.6e3)
DISC = CodeUnits(length=1.496e13, mass=2e28, time=5.02e6)

ASTROPY = {
    "length": "cm",
    "mass": "g",
    "time": "s",
    "velocity": "cm / s",
    "density": "g / cm3",
    "pressure": "erg / cm3",
    "specific energy": "erg / g",
    "energy": "erg",
    "momentum": "g cm / s",
    "angular momentum": "g cm2 / s",
    "power": "erg / s",
}


@pytest.mark.parametrize("quantity", SCALES)
def test_units_are_those_of_astropy(quantity):
    length, mass, time = STAR.length * units.cm, STAR.mass * units.g, STAR.time * units.s
    a, b, c = SCALES[quantity]
    expected = length**a * mass**b * time**c
    cgs = expected.to_value(ASTROPY[quantity])  # raises if the dimensions are not those of the quantity
    assert STAR.unit(quantity) == pytest.approx(cgs, rel=1e-14)
    assert STAR.unit(quantity, "si") == pytest.approx(expected.si.value, rel=1e-14)
    assert STAR.into(DISC, quantity) * DISC.unit(quantity) == pytest.approx(cgs, rel=1e-14)


def test_geometrised_units():
    """G = c = 1 and the nominal mass of the Sun: IAU 2015 Resolution B3, CODATA 2018 and 2022 (same G and c)."""
    sun = code_units(geometrised=1.0)
    nominal = 1.3271244e20  # GM of the Sun, m^3 / s^2, IAU 2015 Resolution B3
    assert constants.iau2015.GM_sun.si.value == nominal
    assert sun.unit("length") == pytest.approx(147662.5038050125, rel=1e-14)  # cm, GM / c^2
    assert sun.unit("time") == pytest.approx(4.925490947641267e-6, rel=1e-14)  # s, GM / c^3
    assert sun.unit("mass") == pytest.approx(nominal / codata.G * 1e3, rel=1e-14)
    assert sun.unit("density") == pytest.approx(6.17582847926e17, rel=1e-11)
    assert sun.unit("pressure") == pytest.approx(5.55055782873e38, rel=1e-11)
    assert sun.unit("power") == pytest.approx(3.62825490441e59, rel=1e-11)  # c^5 / G
    assert sun.field_unit("cgs", "gaussian") == pytest.approx(2.35596218746e19, rel=1e-11)  # c^4 / (G^(3/2) M)
    assert sun.field_unit() == pytest.approx(8.35166850349e19, rel=1e-11)
    assert sun.light == pytest.approx(1.0, rel=1e-15)
    in_grams = code_units(geometrised=sun.unit("mass"), mass_in="g")
    assert in_grams.unit("length") == pytest.approx(sun.unit("length"), rel=1e-14)
    assert code_units(geometrised=4.3e6).unit("time") == pytest.approx(4.3e6 * sun.unit("time"), rel=1e-14)


def test_a_fluid_without_weight_has_a_density_of_its_own():
    hole = code_units({"density": 1e-5}, geometrised=10.0)
    assert hole.unit("density") == pytest.approx(1e-5, rel=1e-13)
    assert hole.unit("velocity") == pytest.approx(100 * codata.c, rel=1e-13)
    assert hole.unit("length") == pytest.approx(1476625.038050125, rel=1e-13)


def test_magnetic_fields():
    """A Gaussian field of 1e4 G and one of 1 T have the same energy density, but for mu_0's tenth digit."""
    cgs, si = CodeUnits(1.0, 1.0, 1.0), CodeUnits(100.0, 1000.0, 1.0)
    gauss, tesla = cgs.field_unit("cgs"), si.field_unit("si")
    assert cgs.field_unit("cgs", "gaussian") == pytest.approx(1.0, rel=1e-15)
    assert gauss == pytest.approx(3.5449077018110320546, rel=1e-15)  # sqrt(4 pi)
    assert (1e4 / gauss) ** 2 / 2 == pytest.approx(3978873.5772974, rel=1e-13)  # erg / cm^3, B^2 / (8 pi)
    assert (1.0 / tesla) ** 2 / 2 == pytest.approx(397887.35778227, rel=1e-9)  # J / m^3, B^2 / (2 mu_0)
    assert (1.0 / tesla) ** 2 / 2 == pytest.approx(1 / (2 * codata.mu_0), rel=1e-14)
    field = 3.7 * STAR.field_unit("cgs", "gaussian") * units.G
    assert 3.7 * STAR.field_unit("si", "gaussian") * units.T.to("G") == pytest.approx(field.value, rel=1e-9)


def test_a_field_stored_in_gauss_or_tesla():
    """1 T is 1e4 G (SI Brochure, 9th edition, 2019, table on other units; but for the tenth digit of mu_0)."""
    for code in (STAR, DISC):
        gauss, tesla = size_of("gauss", code), size_of("tesla", code)
        assert tesla / gauss == pytest.approx(1e4, rel=1e-9)
        assert gauss * code.field_unit("cgs") == pytest.approx(1.0, rel=1e-15)
    with pytest.raises(ValueError, match="'tesla' without units of length, mass and time"):
        size_of("tesla")
    with pytest.raises(ValueError, match="'oersted'; expected a number or one of heaviside-lorentz, gaussian, gauss"):
        size_of("oersted")


def test_flux_and_energy_move_together_between_codes():
    """B^2 / 2 is an energy density in both codes, and a flux is a field times an area."""
    b = 2.5 * STAR.into(DISC, "field")
    assert b**2 == pytest.approx(2.5**2 * STAR.into(DISC, "pressure"), rel=1e-14)
    assert STAR.into(DISC, "flux") == pytest.approx(
        STAR.into(DISC, "field") * STAR.into(DISC, "length") ** 2, rel=1e-15
    )
    maxwell = STAR.field_unit() * STAR.unit("length") ** 2
    assert STAR.into(DISC, "flux") == pytest.approx(maxwell / (DISC.field_unit() * DISC.unit("length") ** 2), rel=1e-14)


@pytest.mark.parametrize(
    "scales",
    [
        {"length": 6.96e10, "mass": 1.5e33, "time": 1.6e3},
        {"density": 4.45e0, "velocity": 4.35e7, "length": 6.96e10},
        {"pressure": 1e16, "velocity": 1e8, "power": 1e33},
        {"length": 1e10, "mass": 1e30, "time": 1e2, "velocity": 1e8},  # the last says the same again
    ],
)
@pytest.mark.parametrize("system", ["cgs", "si"])
def test_any_three_independent_scales_will_do(scales, system):
    found = code_units(scales, system)
    for name, size in scales.items():
        assert found.unit(name, system) == pytest.approx(size, rel=1e-13)


def test_as_dict_tells_where_constants_are_from():
    plain = STAR.as_dict()
    assert plain["length"] == 6.96e10
    assert plain["light"] == pytest.approx(2.99792458e10 / (6.96e10 / 1.6e3))
    assert "CODATA" in plain["constants"]
    assert "IAU 2015" in plain["constants"]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"scales": {"length": 1.0, "mass": 1.0}}, r"length, mass given, which does not settle length, mass and time"),
        ({"scales": {"length": 1.0, "time": 1.0, "velocity": 1.0}}, "does not settle"),
        ({}, "nothing given"),
        (
            {"scales": {"length": 1.0, "mass": 1.0, "time": 1.0, "velocity": 2.0}},
            r"velocity is given as 2 .* make it 1;",
        ),
        ({"scales": {"length": 1e5}, "geometrised": 1.0}, "expected no unit twice"),
        ({"scales": {"lenght": 1.0}}, "unknown scale 'lenght'"),
        ({"scales": {"length": -1.0}}, "length is -1.0, expected a positive number"),
        ({"scales": {"length": math.nan}}, "expected a positive number"),
        ({"geometrised": 0.0}, "geometrised mass is 0.0"),
        ({"geometrised": 1.0, "mass_in": "oz"}, "mass in 'oz', expected one of M_sun, g, kg"),
        ({"geometrised": 1.0, "scales": {"density": 1.0}, "system": "mks"}, "system 'mks', expected one of cgs, si"),
    ],
)
def test_units_that_make_no_sense_are_refused(arguments, message):
    with pytest.raises(JobError, match=message):
        code_units(**arguments)


def test_unknown_quantities_are_refused():
    with pytest.raises(JobError, match="unknown quantity 'colour'"):
        STAR.unit("colour")
