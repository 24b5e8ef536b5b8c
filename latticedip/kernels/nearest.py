"""How near points lie to the closest atom of a crystal.

Flat arrays in, ``out`` buffers filled in place; nothing here knows of crystals.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel


@kernel(fastmath=ORDERED)
def nearest_distances(first, last, points, sites, cell, out):
    """Write to rows first..last of ``out`` (n,) the distance in Å to the nearest image of any site.

    points (n, 3), sites (n_sites, 3), at least one: fractional in the reduced cell (3, 3). The image is the one that
    rounding each coordinate finds, which is the nearest one wherever two images are not about equally far.
    """
    n_sites = sites.shape[0]
    square = np.empty(n_sites)
    for row in range(first, last):
        fx = points[row, 0]
        fy = points[row, 1]
        fz = points[row, 2]
        for s in range(n_sites):
            a = fx - sites[s, 0]
            b = fy - sites[s, 1]
            c = fz - sites[s, 2]
            a -= np.rint(a)
            b -= np.rint(b)
            c -= np.rint(c)
            x = a * cell[0, 0] + b * cell[1, 0] + c * cell[2, 0]
            y = a * cell[0, 1] + b * cell[1, 1] + c * cell[2, 1]
            z = a * cell[0, 2] + b * cell[1, 2] + c * cell[2, 2]
            square[s] = x * x + y * y + z * z
        least = square[0]
        for s in range(1, n_sites):
            least = min(least, square[s])
        out[row] = np.sqrt(least)
