"""Relaxation: the decay of single waves, the published test, and where it ends."""

from __future__ import annotations

import json

import numpy as np
import pytest

import fieldmover as fm
from fieldmover import compute
from fieldmover.projection import relax, side_by_side
from tests.cases import bent
from tests.test_projection import noise
from tests.test_projection_physics import ball, peak, shell


def wave(n, m=1):
    """Bx = cos(2 pi m x) in a periodic box: one wave of divergence."""
    q = np.linspace(0, 1, n + 1)
    grid = fm.cartesian_grid(q, [0, 0.5, 1], [0, 0.5, 1], periodic=(True,) * 3)
    return fm.FaceFlux(
        grid,
        (np.cos(2 * np.pi * m * q)[:, None, None] * np.full((1, 2, 2), 0.25), np.zeros((n, 3, 2)), np.zeros((n, 2, 3))),
    )


def decay(t, k, length):
    """The telegraph equation of Dedner et al. (2002): u'' + u' / length + k^2 u = 0, u(0) = 1, u'(0) = 0."""
    rate = np.sqrt(complex(0.25 / length**2 - k * k))
    return (np.exp(-0.5 * t / length) * (np.cosh(rate * t) + 0.5 / length * np.sinh(rate * t) / rate)).real


@pytest.mark.parametrize("length", [0.02, 0.15, 0.8], ids=["creeping", "as default", "ringing"])
def test_waves_decay_as_the_telegraph_equation_says(length):
    errors = []
    for n in (32, 64, 128):
        _, record = relax(wave(n), steps=2 * n, damping=length)
        # The sum of all conductances of a cell over its volume is 2 n^2 + 4 (2 / 1)^2.
        step = 1 / np.sqrt(2 * n * n + 16)
        # The first kick of psi lasts a whole step, so that B is half a step ahead of the clock.
        exact = np.abs(decay(step * (np.arange(1, 2 * n + 1) + 0.5), 2 * np.pi, length))
        errors.append(np.abs(np.array(record.history) - exact).max())
    assert errors[2] < max(0.02, 0.2 * step / length)  # damping is of first order in the step
    assert errors[2] < 0.6 * errors[1] < 0.36 * errors[0], errors


def test_peak_in_one_component():
    """Set-up and damping of Dedner et al., J. Comput. Phys. 175, 645 (2002), peak in Bx, both from memory.

    Relaxed to the end it is what potential theory says of the projection: int B'^2 = (pi / 320 + (pi / 192)^2 / 4) / 2.
    """
    errors = []
    for n in (64, 128):
        q = np.linspace(-0.5, 1.5, n + 1)
        grid = fm.cartesian_grid(q, q, [0, 1], periodic=(True, True, True))
        flux = fm.flux_from_function(grid, peak)
        clean, _ = fm.project(flux)
        apart, left = [], []
        for tolerance in (1e-1, 1e-2, 1e-3, 1e-5):
            relaxed, record = relax(flux, tolerance=tolerance, damping=0.18)
            assert record.history[-1] <= tolerance < record.history[-2]
            apart.append(side_by_side(flux, clean, relaxed))
            left.append(apart[-1]["energy_of_difference"] / apart[-1]["energy_of_projection"])
        assert left[0] > 5e-2  # the long waves are still there
        assert left[0] > 10 * left[1] > 100 * left[2]
        assert left[-1] < 1e-8
        assert apart[-1]["correlation"] == pytest.approx(1, abs=1e-8)
        energy = 2 * record.energy_after / ((np.pi / 320 + (np.pi / 192) ** 2 / 4) / 2)
        errors.append(abs(energy - 1))
    assert errors[1] < 0.4 * errors[0] < 4e-2


@pytest.mark.parametrize("walls", ["open", (("open", "fixed"), "open", "open")], ids=["open", "half fixed"])
def test_it_ends_at_the_projection(walls):
    grid = bent(6)
    flux, rng = noise(grid), np.random.default_rng(1)
    frozen = [rng.random(f.shape) < 0.05 for f in flux.faces]
    weights = [10.0 ** rng.uniform(-0.5, 0.5, f.shape) for f in flux.faces]
    excised = ball(grid, (1, 0, 0), 0.4)
    arguments = {"walls": walls, "frozen": frozen, "weights": weights, "excised": excised}
    clean, one = fm.project(flux, tolerance=1e-12, **arguments)
    relaxed, other = relax(flux, tolerance=1e-9, **arguments)
    for a, b in zip(clean.faces, relaxed.faces, strict=True):
        np.testing.assert_allclose(b, a, atol=1e-6)
    assert other.energy_removed == pytest.approx(one.energy_removed, rel=1e-7)
    assert other.excised_cells == one.excised_cells == excised.sum()
    assert other.frozen_faces == one.frozen_faces
    for a, b, m in zip(flux.faces, relaxed.faces, frozen, strict=True):
        assert np.array_equal(a[m], b[m])


def test_the_hole_of_a_shell_loses_its_charge_too():
    flux = noise(shell(6))
    clean, _ = fm.project(flux)
    relaxed, record = relax(flux, tolerance=1e-8)
    assert abs(record.charge_before) > 0.1
    assert abs(record.charge_after) < 1e-6
    found = side_by_side(flux, clean, relaxed)
    assert found["energy_of_difference"] < 1e-10 * found["energy_of_projection"]


def test_stable_whatever_the_damping_and_the_grid():
    for grid in (shell(5), bent(5)):
        for damping in (1e-6, 1e-2, 1e3):
            _, record = relax(noise(grid), steps=400, damping=damping)
            assert max(record.history) < 30
            assert record.stopped == "steps done"


def test_a_clean_field_stays():
    clean, _ = fm.project(noise(shell(5)))
    relaxed, record = relax(clean)
    assert all(np.array_equal(a, b) for a, b in zip(clean.faces, relaxed.faces, strict=True))
    assert record.method == "none"
    json.dumps(record.as_dict(), allow_nan=False)


def test_share_of_the_change_in_regions():
    grid = shell(6)
    flux = fm.project(noise(grid))[0]
    flux.f2[2:4, 3, 5] += 0.1
    cells = np.zeros(grid.shape, dtype=bool)
    cells[1:5, 1:5, 3:8] = True
    parts = {"near": cells, "outside": ~cells, "nothing": cells & ~cells}
    for clean in (fm.project, relax):
        _, record = clean(flux, regions=parts)
        shares = record.as_dict()["change_in_regions"]
        assert 0.75 < shares["near"] < 1
        assert shares["near"] + shares["outside"] == pytest.approx(1, rel=1e-13)
        assert shares["nothing"] == 0
    with pytest.raises(
        fm.errors.FieldError, match=r"region 'near': bool array of shape \(6, 6, 11\), expected bool of"
    ):
        fm.project(flux, regions={"near": cells[:, :, 1:]})


def test_same_bits_on_one_and_two_threads():
    before, found = compute.threads(), []
    try:
        for count in (1, 2):
            compute.set_threads(count)
            found.append(relax(noise(shell(8)), steps=20)[0].faces)
    finally:
        compute.set_threads(before)
    assert all(np.array_equal(a, b) for a, b in zip(*found, strict=True))


def test_not_converged_carries_the_history():
    with pytest.raises(
        fm.errors.NotConverged, match=r"after 7 steps the largest net flux is .* expected 0.001"
    ) as found:
        relax(noise(bent(4)), limit=7)
    assert len(found.value.history) == 7


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"steps": 0}, "steps: 0, expected at least 1"),
        ({"damping": 0.0}, "damping: 0.0, expected a positive length"),
        ({"damping": np.nan}, "damping: nan"),
        ({"tolerance": 0.0}, "tolerance: 0.0, expected at least"),
        ({"walls": "shut"}, "'shut', expected 'open' or 'fixed'"),
    ],
)
def test_bad_input_is_named(arguments, message):
    with pytest.raises(fm.errors.FieldError, match=message):
        relax(noise(bent(3)), **arguments)
