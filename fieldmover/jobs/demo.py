"""An invented snapshot: a tilted magnetised ring round a young star that has a dipole field.

It is written the way a simulation code might leave it: a full sphere in log r, the polar angle crowded to the
midplane, ghost layers in every axis, arrays stored [k, j, i] in single precision, the magnetic field as
components at cell centres. Such a field has monopoles: its fluxes do not add up to zero.

Lengths are in radii of the star, densities in that of the ring's core, speeds in that of an orbit at one
radius.
"""

from __future__ import annotations

import importlib.resources
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fieldmover.errors import JobError
from fieldmover.snapshots.axes import spaced
from fieldmover.snapshots.gate import hdf5
from fieldmover.snapshots.write import unwritable

Array = NDArray[np.float64]

SNAPSHOT, JOB, OUTPUT = "ring.h5", "ring.toml", "ring-cartesian.h5"
GHOSTS = 3


@dataclass(frozen=True)
class Ring:
    """The scene in closed form, in Cartesian components; positions x have shape (3, ...).

    The field is the sum of a point dipole, A = m x r / r^3, a toroidal field and the curl of a toroidal
    potential. With n the ring's axis, s the distance from it, z the height along it and g = exp(-((s - R)^2 +
    z^2) / (2 w^2)), the latter two are multiples of (n x r) g / R; the curl of such a potential has the
    components s z g / w^2 away from the axis and (2 - s (s - R) / w^2) g along it, both over R.
    """

    radius: float = 4.0
    width: float = 0.75
    tilt: float = 0.35
    dipole_tilt: float = -0.2
    dipole: float = 2.5
    toroidal: float = 1.5
    poloidal: float = 0.5
    thinnest: float = 1e-6

    def _ring_frame(self, x: Array) -> tuple[Array, Array, Array, Array, Array]:
        """Axis, n x r, s, z and g."""
        n = np.array([np.sin(self.tilt), 0.0, np.cos(self.tilt)])
        around = np.stack([n[1] * x[2] - n[2] * x[1], n[2] * x[0] - n[0] * x[2], n[0] * x[1] - n[1] * x[0]])
        s, z = np.sqrt((around**2).sum(axis=0)), np.tensordot(n, x, 1)
        g = np.exp(-((s - self.radius) ** 2 + z**2) / (2 * self.width**2))
        return n, around, s, z, g

    def field(self, x: Array) -> Array:
        """Magnetic field, Gaussian."""
        r2 = (x**2).sum(axis=0)
        m = self.dipole * np.array([np.sin(self.dipole_tilt), 0.0, np.cos(self.dipole_tilt)])
        shaped_m = m.reshape(3, *[1] * (x.ndim - 1))
        dipole = (3 * np.tensordot(m, x, 1) * x / r2 - shaped_m) / r2**1.5
        n, around, s, z, g = self._ring_frame(x)
        shaped_n = n.reshape(3, *[1] * (x.ndim - 1))
        away = x - z * shaped_n  # s times the unit vector away from the axis
        w2 = self.width**2
        loops = (away * z / w2 + shaped_n * (2 - s * (s - self.radius) / w2)) * g
        return np.asarray(dipole + (self.toroidal * around * g + self.poloidal * loops) / self.radius)

    def density(self, x: Array) -> Array:
        """Density: the ring in a thin wind."""
        *_, g = self._ring_frame(x)
        return np.asarray(g + self.thinnest * (1 + 8 / (x**2).sum(axis=0)))

    def velocity(self, x: Array) -> Array:
        """Rotation about the ring's axis, like an orbit away from it."""
        _, around, s, _, _ = self._ring_frame(x)
        return np.asarray(around / (s**2 + 0.25) ** 0.75)


def write_demo(folder: Path, overwrite: bool = False, cells: tuple[int, int, int] = (96, 64, 128)) -> Path:
    """Write the snapshot and its job into a folder; the path of the job is returned.

    Parameters
    ----------
    folder : Path
        Made if missing.
    overwrite : bool
        Whether files of the same name are replaced even if they are not those of an earlier demo.
    cells : three int
        Cells in r, theta, phi; the last must be even.

    Raises
    ------
    JobError
        If the folder holds such files.
    OutputError
        If it cannot be written.
    """
    job = folder / JOB
    try:
        ours = job.exists() and job.read_text(encoding="utf-8", errors="replace") == job_text()
        taken = [name for name in (JOB, SNAPSHOT, OUTPUT) if (folder / name).exists()]
        if taken and not (ours or overwrite):
            raise JobError(f"{folder / taken[0]}: exists and is not of this demo; give another folder or --overwrite")
        folder.mkdir(parents=True, exist_ok=True)
        job.write_text(job_text(), encoding="utf-8")
        write_snapshot(folder / SNAPSHOT, cells)
    except OSError as error:
        raise unwritable(folder, error) from None
    return job


def job_text() -> str:
    """The job file of the demo."""
    return importlib.resources.files("fieldmover.jobs").joinpath("demo.toml").read_text(encoding="utf-8")


def write_snapshot(path: Path, cells: tuple[int, int, int], scene: Ring | None = None) -> None:
    """Sample the scene at cell centres and store it as a simulation code might."""
    scene = Ring() if scene is None else scene
    r = spaced(1.0, 10.0, cells[0], "log")
    theta = spaced(0.0, np.pi, cells[1], "sinh", 3.0)
    phi = spaced(0.0, 2 * np.pi, cells[2], "uniform")
    centres = [0.5 * (q[1:] + q[:-1]) for q in (r, theta, phi)]
    q1, q2, q3 = np.meshgrid(*centres, indexing="ij", sparse=True)
    st, ct, sp, cp = np.sin(q2), np.cos(q2), np.sin(q3), np.cos(q3)
    x = np.stack(np.broadcast_arrays(q1 * st * cp, q1 * st * sp, q1 * ct))
    b, v = _spherical(scene.field(x), st, ct, sp, cp), _spherical(scene.velocity(x), st, ct, sp, cp)
    with hdf5().File(path, "w") as file:
        file.attrs["code"] = np.bytes_("invented example, not the output of a simulation")
        for name, nodes in zip(("r", "theta", "phi"), _nodes_with_ghosts(r, theta, phi), strict=True):
            file[f"mesh/{name}"] = nodes.astype(np.float32)
        for name, sign, b_part, v_part in zip(("r", "theta", "phi"), (1, -1, -1), b, v, strict=True):
            file[f"field/b_{name}"] = _as_stored(b_part, sign)
            file[f"gas/v_{name}"] = _as_stored(v_part, sign)
        file["gas/rho"] = _as_stored(scene.density(x), 1)
        file.create_group("state").attrs["time"] = 12.5


def _spherical(v: Array, st: Array, ct: Array, sp: Array, cp: Array) -> tuple[Array, Array, Array]:
    """Orthonormal spherical components of a vector given by its Cartesian ones."""
    outward = v[0] * cp + v[1] * sp
    return outward * st + v[2] * ct, outward * ct - v[2] * st, v[1] * cp - v[0] * sp


def _nodes_with_ghosts(r: Array, theta: Array, phi: Array) -> tuple[Array, Array, Array]:
    """Nodes continued into the ghosts: by equal ratios, mirrored at the poles, round the circle."""
    g, count = GHOSTS, np.arange(1, GHOSTS + 1)
    ratio = r[1] / r[0]
    inner, outer = r[0] / ratio ** count[::-1], r[-1] * ratio**count
    before, after = -theta[g:0:-1], 2 * np.pi - theta[-2 : -2 - g : -1]
    turn = 2 * np.pi
    return (
        np.concatenate([inner, r, outer]),
        np.concatenate([before, theta, after]),
        np.concatenate([phi[-1 - g : -1] - turn, phi, phi[1 : g + 1] + turn]),
    )


def _as_stored(a: Array, sign: int) -> NDArray[np.float32]:
    """An array with ghosts (copies in r, across the poles, periodic in phi), stored [k, j, i] in float32.

    `sign` is -1 for components whose direction turns round across a pole.
    """
    g = GHOSTS
    a = np.pad(a, ((g, g), (0, 0), (0, 0)), mode="edge")
    across = sign * np.roll(a, a.shape[2] // 2, axis=2)
    a = np.concatenate([across[:, g - 1 :: -1], a, across[:, : -g - 1 : -1]], axis=1)
    a = np.pad(a, ((0, 0), (0, 0), (g, g)), mode="wrap")
    return np.ascontiguousarray(a.T, dtype=np.float32)
