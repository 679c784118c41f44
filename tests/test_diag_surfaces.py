"""Flux through spheres, caps and discs anywhere in a grid, and the splines that give it."""

from __future__ import annotations

import math

import numpy as np
import pytest

import fieldmover as fm
from fieldmover.diagnostics import FluxSpline, cap, disc, hemisphere, sphere, surface_fluxes
from fieldmover.errors import FieldError
from tests import earth, fields
from tests.test_diagnostics import TURN, solenoidal
from tests.test_diagnostics import sphere as ball


def net(flux, **surfaces):
    return {name: found.net for name, found in surface_fluxes(flux, surfaces).items()}


def _charge(x, y, z):
    r3 = 4 * np.pi * np.sqrt(x * x + y * y + z * z) ** 3
    return x / r3, y / r3, z / r3


def test_a_dipole_through_caps_and_discs():
    """Through a cap 2 pi sin^2(theta) / r, through the plane between a and b -2 pi (1/a - 1/b) (by hand)."""

    def errors(n):
        flux = solenoidal(ball(n, 2 * n + 1, 8), fields.dipole())  # the equator lies between nodes
        cases = {f"{r} {t}": cap(r, t) for r in (1.02, 1.37, 1.98) for t in (0.1, 0.9, 2.0)}
        exact = {f"{r} {t}": TURN * math.sin(t) ** 2 / r for r in (1.02, 1.37, 1.98) for t in (0.1, 0.9, 2.0)}
        cases |= {f"half {r}": hemisphere(r) for r in (1.02, 1.5, 1.98)}
        exact |= {f"half {r}": TURN / r for r in (1.02, 1.5, 1.98)}
        cases |= {f"ring {r}": disc(r, inner=1.01) for r in (1.2, 1.98)}
        exact |= {f"ring {r}": -TURN * (1 / 1.01 - 1 / r) for r in (1.2, 1.98)}
        found = net(flux, **cases)
        return max(abs(found[name] - exact[name]) for name in cases)

    coarse, fine = errors(12), errors(24)
    assert np.log2(coarse / fine) > 3.3, (coarse, fine)
    assert fine < 2e-5


def test_a_dipole_seen_from_the_side():
    """No net flux through a half cut along the axis; all that goes out comes back, 2 pi m / r each way (by hand)."""
    flux = solenoidal(ball(16, 24, 32), fields.dipole())
    found = surface_fluxes(flux, {"east": hemisphere(1.5, "x"), "all": sphere(1.5)})
    assert abs(found["east"].net) < 1e-12
    assert found["all"].net == 0
    np.testing.assert_allclose(found["east"].unsigned, TURN / 1.5, rtol=1e-3)
    np.testing.assert_allclose(found["all"].unsigned, 2 * TURN / 1.5, rtol=1e-3)


def test_the_earths_hemispheres():
    """International Geomagnetic Reference Field, 14th generation: closed form in the coefficients g_n0, n odd."""
    shell = np.geomspace(earth.RADIUS * (1 - 1e-12), 2 * earth.RADIUS * (1 + 1e-12), 13)
    flux = solenoidal(fm.spherical_grid(shell, np.linspace(0, np.pi, 25), np.linspace(0, TURN, 49)), earth.EARTH)
    found = net(flux, **{str(radius): hemisphere(radius) for radius in earth.HEMISPHERE_FLUX})
    for radius, expected in earth.HEMISPHERE_FLUX.items():
        np.testing.assert_allclose(found[str(radius)], expected, rtol=1e-5)


def test_an_abc_field_through_a_tilted_disc_of_a_box():
    """curl B = B (Dombre et al., J. Fluid Mech. 167, 353, 1986): the flux is the circulation of B round the rim."""
    phi = TURN * np.arange(256) / 256
    n = np.array([1.0, 2.0, 2.0]) / 3
    e, f = np.array([2.0, -2.0, 1.0]) / 3, np.array([2.0, 1.0, -2.0]) / 3
    assert np.cross(e, f) @ n == pytest.approx(1)
    x = np.array([3.0, 3.2, 2.9])[:, None] + e[:, None] * np.cos(phi) + f[:, None] * np.sin(phi)
    along = f[:, None] * np.cos(phi) - e[:, None] * np.sin(phi)
    exact = (np.stack(fields.ABC.b(*x)) * along).sum() * TURN / 256
    q = np.linspace(0, TURN, 25)
    box = fm.cartesian_grid(q, q, q, periodic=(True,) * 3)
    flux = solenoidal(box, fields.ABC)
    lids = {
        "disc": disc(1, n, (3, 3.2, 2.9)),
        "over": hemisphere(1, n, (3, 3.2, 2.9)),
        "under": hemisphere(1, -n, (3, 3.2, 2.9)),
    }
    found = net(flux, **lids)
    np.testing.assert_allclose(found["disc"], exact, rtol=1e-4)
    # The same rim, whatever the surface; a mean field adds its own flux.
    np.testing.assert_allclose((found["over"], -found["under"]), found["disc"], rtol=1e-11)
    more = fm.FaceFlux(box, (flux.f1, flux.f2, flux.f3 + 0.3 * box.face_areas()[2]))
    np.testing.assert_allclose(net(more, **lids)["disc"] - found["disc"], 0.3 * np.pi * 2 / 3, rtol=1e-11)


def test_the_toroidal_flux_of_a_spheromak():
    """Chandrasekhar & Kendall, ApJ 126, 457 (1957); poloidal flux through the disc within the magnetic axis."""
    q = np.linspace(-1.1, 1.1, 41)
    flux = solenoidal(fm.cartesian_grid(q, q, q), fields.SPHEROMAK)
    found = surface_fluxes(flux, {"poloidal": disc(fields.SPHEROMAK_AXIS)})
    np.testing.assert_allclose(found["poloidal"].net, fields.SPHEROMAK_POLOIDAL_FLUX, rtol=1e-5)
    np.testing.assert_allclose(found["poloidal"].unsigned, fields.SPHEROMAK_POLOIDAL_FLUX, rtol=1e-4)


@pytest.mark.parametrize("kind", ["ball", "warped"])
def test_charge_is_counted(kind):
    """Gauss: a unit charge in the hole, and what a cell with divergence holds."""
    grid = ball(12, 24, 32)
    if kind == "warped":
        grid = fm.warped_grid(*grid.nodes, grid.map.to_cartesian, grid.periodic, grid.poles)
    found = net(fm.flux_from_function(grid, _charge), ball=sphere(1.5), half=hemisphere(1.3, "-y"))
    np.testing.assert_allclose(found["ball"], 1, rtol=1e-6)
    np.testing.assert_allclose(found["half"], 0.5, rtol=1e-6)
    clean = solenoidal(grid, fields.dipole())
    noise = np.random.default_rng(0).normal(size=clean.f3.shape)
    noise[:, :, -1] = noise[:, :, 0]
    rough = fm.FaceFlux(grid, (clean.f1, clean.f2, clean.f3 + 1e-7 * noise))
    np.testing.assert_allclose(net(rough, half=hemisphere(1.5))["half"], TURN / 1.5, rtol=1e-4)


def test_a_charge_that_no_wall_can_balance():
    """In the hollow of a torus, where no potential exists; through a disc it sends its share of the solid angle."""

    def to_cartesian(a, b, c):
        R = 2 + a * np.cos(b)
        return R * np.cos(c), R * np.sin(c), -a * np.sin(b)

    angle = np.linspace(0, TURN, 49)
    torus = fm.warped_grid(np.linspace(0.3, 1, 15), angle, np.linspace(0, TURN, 97), to_cartesian, (False, True, True))
    flux = fm.flux_from_function(torus, lambda x, y, z: _charge(x - 2, y, z))
    exact = (1 - 0.65 / math.hypot(0.65, 0.25)) / 2
    found = net(flux, lid=disc(0.25, "x", (2.65, 0, 0)))
    np.testing.assert_allclose(found["lid"], exact, rtol=1e-3)


@pytest.mark.parametrize(
    ("surface", "words"),
    [
        (sphere(3), r"sphere of radius 3 about \(0, 0, 0\) leaves the grid, at \("),
        (disc(1.5), r"disc of radius 1.5 about \(0, 0, 0\), normal \(0, 0, 1\) leaves the grid"),  # the hole
        (cap(1.5, 0.5, centre=(1, 0, 0)), "28.6479 degrees to its rim leaves the grid"),
    ],
)
def test_surfaces_that_leave_the_grid(surface, words):
    with pytest.raises(FieldError, match=words):
        surface_fluxes(solenoidal(ball(3, 4, 6)), {"lid": surface})


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: sphere(0), "radius 0, expected a positive"),
        (lambda: cap(1, 0), "angle 0, expected more than 0"),
        (lambda: disc(1, inner=1), "inner radius 1, expected"),
        (lambda: disc(1, "w"), "normal 'w', expected x, y"),
        (lambda: disc(1, (0, 0, 0)), "not zero"),
        (lambda: sphere(1, (0, np.nan, 0)), "three finite numbers"),
    ],
)
def test_surfaces_that_are_none(make, words):
    with pytest.raises(FieldError, match=words):
        make()


@pytest.mark.parametrize("kind", ["ball", "cylinder", "box", "warped"])
def test_splines_of_fluxes_at_points(kind):
    """Fourth order in the mean; beside a pole at least second."""

    def grid(n):
        if kind == "cylinder":
            return fm.cylindrical_grid(
                np.linspace(0, 1.2, n + 1), np.linspace(0, TURN, 2 * n + 1), np.linspace(-1, 1, n + 1)
            )
        if kind == "ball":
            return ball(n, 2 * n, 2 * n)
        q = np.linspace(-1, 1, n + 1)
        if kind == "warped":
            return fm.warped_grid(
                q, q, q, lambda a, b, c: (a + 0.1 * np.sin(b), b - 0.1 * np.sin(c), c + 0.1 * np.sin(a))
            )
        return fm.cartesian_grid(q, q, q)

    x = np.random.default_rng(1).uniform(-0.8, 0.8, (3, 4000))
    if kind == "ball":
        x *= np.random.default_rng(2).uniform(1.05, 1.9, 4000) / np.sqrt((x**2).sum(axis=0))
        x[:2, :20], x[2, :20] = 0.0, 1.3  # on the axis
    exact = np.stack(fields.WAVE.b(*x))

    def errors(n):
        error = np.abs(FluxSpline(solenoidal(grid(n))).at(x) - exact)
        return np.array([error.mean(), error.max()])

    coarse, fine = errors(12), errors(24)
    orders = np.log2(coarse / fine)
    assert (orders > (3.6, 2.0)).all(), (coarse, fine)
    assert (fine < (4e-4, 2e-2)).all(), fine
    outside = FluxSpline(solenoidal(grid(12))).at(np.full((3, 1), 5.0))
    assert np.isnan(outside).all()
