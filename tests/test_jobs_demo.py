"""The invented snapshot: its closed forms, and what is stored of them."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
import sympy as sp

from fieldmover.jobs.demo import GHOSTS, Ring, write_snapshot

CELLS = (12, 8, 16)
FIELD = ("b_r", "b_theta", "b_phi")
GAS = ("rho", "v_r", "v_theta", "v_phi")


@pytest.fixture(scope="module")
def snapshot(tmp_path_factory):
    path = tmp_path_factory.mktemp("demo") / "ring.h5"
    write_snapshot(path, CELLS)
    with h5py.File(path) as file:
        found = {}
        file.visititems(
            lambda name, item: found.update({name: item[()]}) if isinstance(item, h5py.Dataset) else None
        )
        found["time"] = file["state"].attrs["time"]
    return found


def test_the_field_is_the_curl_of_its_potential():
    """B of the scene at random points against sympy's curl of the potential that its docstring names."""
    scene = Ring()
    x = sp.Matrix(sp.symbols("x y z"))
    n = sp.Matrix([sp.sin(scene.tilt), 0, sp.cos(scene.tilt)])
    m = scene.dipole * sp.Matrix([sp.sin(scene.dipole_tilt), 0, sp.cos(scene.dipole_tilt)])
    around = n.cross(x)
    s, z = sp.sqrt(around.dot(around)), n.dot(x)
    g = sp.exp(-((s - scene.radius) ** 2 + z**2) / (2 * scene.width**2))
    a = m.cross(x) / sp.sqrt(x.dot(x)) ** 3 + scene.poloidal * around * g / scene.radius
    curl = sp.Matrix([
        sp.diff(a[2], x[1]) - sp.diff(a[1], x[2]),
        sp.diff(a[0], x[2]) - sp.diff(a[2], x[0]),
        sp.diff(a[1], x[0]) - sp.diff(a[0], x[1]),
    ])  # fmt: skip
    toroidal = scene.toroidal * around * g / scene.radius
    divergence = sum(sp.diff(toroidal[i], x[i]) for i in range(3))
    points = np.random.default_rng(1).uniform(-6, 6, (3, 500))
    wanted = np.array(sp.lambdify(list(x), list(curl + toroidal), "numpy")(*points))
    assert np.abs(scene.field(points) - wanted).max() < 1e-12 * np.abs(wanted).max()
    assert np.abs(sp.lambdify(list(x), divergence, "numpy")(*points)).max() < 1e-14


def test_the_density_covers_six_decades():
    x = np.random.default_rng(1).uniform(-6, 6, (3, 100_000))
    density = Ring().density(x[:, (x**2).sum(axis=0) > 1])
    assert density.min() > 0
    assert 5.9 < np.log10(density.max() / density.min()) < 6.1


def test_arrays_are_stored_as_a_code_might(snapshot):
    n1, n2, n3 = (n + 2 * GHOSTS for n in CELLS)
    for name in ("field/b_r", "field/b_theta", "gas/rho", "gas/v_phi"):
        assert snapshot[name].shape == (n3, n2, n1)
        assert snapshot[name].dtype == np.float32
    for name, n in {"r": n1, "theta": n2, "phi": n3}.items():
        nodes = snapshot[f"mesh/{name}"]
        assert nodes.shape == (n + 1,)
        assert np.all(np.diff(nodes) > 0)
    assert snapshot["mesh/theta"][GHOSTS] == 0
    assert snapshot["time"] == 12.5


def test_ghosts_continue_the_field(snapshot):
    """Ghosts hold the field where they lie: across a pole on the other side, round the circle."""
    r, theta, phi = (np.float64(snapshot[f"mesh/{name}"]) for name in ("r", "theta", "phi"))
    r, theta, phi = (0.5 * (q[1:] + q[:-1]) for q in (r, theta, phi))
    q3, q2, q1 = np.meshgrid(phi, theta, r, indexing="ij")
    st, ct, cp, sp_ = np.sin(q2), np.cos(q2), np.cos(q3), np.sin(q3)
    b = Ring().field(np.stack([q1 * st * cp, q1 * st * sp_, q1 * ct]))
    along = {
        "r": b[0] * st * cp + b[1] * st * sp_ + b[2] * ct,
        "theta": b[0] * ct * cp + b[1] * ct * sp_ - b[2] * st,
        "phi": b[1] * cp - b[0] * sp_,
    }
    inside = slice(GHOSTS, -GHOSTS)  # in r the ghosts are copies
    for name, wanted in along.items():
        found = snapshot[f"field/b_{name}"]
        assert np.abs(found - wanted)[..., inside].max() < 1e-5
        assert np.array_equal(found[..., 0], found[..., GHOSTS])
