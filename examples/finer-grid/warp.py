"""A box that winds with the tube of flux, its cells crowded on the axis."""

import numpy as np


def to_cartesian(q1, q2, q3, winding, crowding):
    a, b = (q * (1 - crowding + crowding * (q / 0.65) ** 2) for q in (q1, q2))
    c, s = np.cos(winding * q3), np.sin(winding * q3)
    return a * c - b * s, a * s + b * c, q3
