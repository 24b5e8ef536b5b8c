"""Sums of squared dipolar pair fields where the probe moves, each pair tensor averaged over its Gaussian cloud first.

Motion that is fast against the linewidth averages the field of every nucleus, and the mean square field follows from
products of averaged tensors. With t = 3nn − 1 over r³ and ⟨t⟩ its average over the cloud these are

    along a strong field h    Σ (h·⟨t⟩·h)²        in zero field    Σ ⟨t⟩·⟨t⟩

For a sharp probe both are contractions of Q_abcd = Σ n_a n_b n_c n_d r⁻⁶. The product of two equal symmetric traceless
tensors holds one part each of rank 0, 2 and 4, as Q does: there is one Q that gives both sums for averaged tensors too,

    Q_aabb = Σ tr⟨t⟩²/6,  Q_abcc = (Σ ⟨t⟩·⟨t⟩ − Q_aabb δ)/3,  Q = (Σ {⟨t⟩⟨t⟩} + 6{δ Q_abcc} − {δδ} Q_aabb)/9

with { } the mean over all orders of the indices. The change of Q by the cloud is summed over pairs and added to the
r⁻⁶ sum of a sharp probe. For an isotropic cloud it ends with the cloud, by the mean-value theorem of harmonic
functions. For another one it falls as r⁻⁸: pairs are then counted with a weight that goes smoothly from 1 to 0, and
what it leaves out is the integral over the uniform density of atoms; what that misses are the waves of the lattice in a
smooth function, and the radius grows until it no longer matters.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import betainc

from latticedip.checks import FloatArray
from latticedip.crystal.model import OVERLAP_A, Crystal
from latticedip.crystal.neighbours import neighbours_of
from latticedip.crystal.place import Place
from latticedip.errors import AccuracyError
from latticedip.sums.pairs import pair_tensors
from latticedip.sums.smear import cloud_of, smeared_pair_tensors
from latticedip.units import DIPOLE_T_A3_PER_MUB

#: An isotropic cloud changes nothing beyond so many of its standard deviations: exp(−40).
ISOTROPIC_REACH = 9.0
#: Least radius (Å), the same in standard deviations along the longest axis, and growth from one radius to the next.
LEAST_RADIUS_A, LEAST_WIDTHS, GROWTH = 12.0, 12.0, 1.3
#: The weight begins to fall at this part of the radius, as an incomplete beta function of this order.
INNER, ORDER = 0.3, 9
#: Two radii agree: parts of the sums of a sharp probe.
AGREED = 1e-11
#: Most pairs of probe and nucleus, and pairs evaluated together.
MOST_PAIRS, BLOCK = 4_000_000, 50_000
#: Points of the integral over what is left out: in cosine, azimuth, within the rim and beyond it.
COSINES, AZIMUTHS, RIM, BEYOND = 10, 20, 24, 10


@dataclass(frozen=True, eq=False)
class Averaged:
    """What a cloud does to the sums of some sites.

    change: Shape (n_sites, 3, 3, 3, 3) in 1/Å⁶, added to the sums Q of a sharp probe; zero for sites not asked for.
    reach: Shape (n_sites,) float. Smallest exponent of the density of the cloud at an atom of the site.
    """

    change: FloatArray
    reach: FloatArray


def averaged_power_tensors(vectors: FloatArray, covariance: FloatArray) -> FloatArray:
    """Shape (n, 3, 3, 3, 3) in 1/Å⁶. Q of single pairs: vectors (n, 3) in Å, none zero; covariance (3, 3) in Å²."""
    tensors = smeared_pair_tensors(vectors, covariance)[0] / DIPOLE_T_A3_PER_MUB
    return _power_tensor(np.einsum("nab,ncd->nabcd", tensors, tensors))


def change_by_cloud(
    crystal: Crystal, place: Place, sites: np.ndarray, covariance: FloatArray, sharp: FloatArray
) -> Averaged:
    """What a Gaussian cloud of a placed probe does to the sums of some sites (indices).

    crystal: periodic in three directions or in none. covariance: Shape (3, 3) in Å², not zero. sharp: Shape (n_sites,
    3, 3, 3, 3) in 1/Å⁶, the sums of a sharp probe. The atom the probe is on does not count.

    Raises AccuracyError where more pairs than can be held are needed for ten digits.
    """
    cloud = cloud_of(covariance)
    longest = float(np.sqrt(cloud.variances[2]))
    # Errors are measured by the mean of an element: what counts are sums over all its sites.
    symbols = np.array(crystal.symbols)[sites]
    own = np.einsum("saabb->s", sharp)[sites]
    size = np.array([own[symbols == symbol].mean() for symbol in symbols])
    products, reach = np.zeros((crystal.n_sites, 3, 3, 3, 3)), np.full(crystal.n_sites, np.inf)
    if cloud.limit == 0.0:
        return Averaged(products, reach)
    if not any(crystal.pbc):
        away = [i for i in sites if np.linalg.norm(place.cart - crystal.places_cart[i]) >= OVERLAP_A]
        for i in away:
            vector = (place.cart - crystal.places_cart[i])[None]
            products[i], reach[i] = _changes(vector, np.ones(1), covariance)
        return Averaged(_power_tensor(products), reach)
    if cloud.is_isotropic:
        products[sites], reach[sites] = _near(crystal, place, sites, covariance, ISOTROPIC_REACH * longest, False)
        return Averaged(_power_tensor(products), reach)
    radius = max(LEAST_RADIUS_A, LEAST_WIDTHS * longest)
    before: FloatArray | None = None
    while True:
        near, reach[sites] = _near(crystal, place, sites, covariance, radius, True)
        found = near + _left_out(covariance, radius) / crystal.volume_A3
        if before is not None:
            missed = np.abs(found - before).max(axis=(1, 2, 3, 4), initial=0.0)
            if np.all(missed <= AGREED * size):
                products[sites] = found
                return Averaged(_power_tensor(products), reach)
        before = found
        radius *= GROWTH


def _near(
    crystal: Crystal, place: Place, sites: np.ndarray, covariance: FloatArray, radius: float, softened: bool
) -> tuple[FloatArray, FloatArray]:
    """Changes of Σ tt (n, 3, 3, 3, 3) and least exponents (n,) over atoms of some sites within a radius in Å."""
    expected = 4 / 3 * np.pi * radius**3 * len(sites) / crystal.volume_A3
    if expected > MOST_PAIRS:
        raise AccuracyError(
            f"the average over this spread needs {expected:.2g} pairs of probe and nucleus for ten digits of the "
            f"linewidth, more than {MOST_PAIRS:.2g}. Take a smaller or an isotropic spread."
        )
    found, _, vectors = neighbours_of(crystal, place.position, radius, tuple(int(i) for i in sites))
    length = np.linalg.norm(vectors, axis=1)
    weight = _weight(length, radius) if softened else np.ones(len(length))
    total, reach = np.zeros((len(sites), 3, 3, 3, 3)), np.full(len(sites), np.inf)
    order = np.argsort(found, kind="stable")
    order = order[length[order] >= OVERLAP_A]
    limits = np.searchsorted(found[order], sites, side="left"), np.searchsorted(found[order], sites, side="right")
    for row, (low, high) in enumerate(zip(*limits, strict=True)):
        chosen = order[low:high]
        for start in range(0, len(chosen), BLOCK):
            some = chosen[start : start + BLOCK]
            change, least = _changes(vectors[some], weight[some], covariance)
            total[row] += change
            reach[row] = min(reach[row], least)
    return total, reach


def _changes(vectors: FloatArray, weight: FloatArray, covariance: FloatArray) -> tuple[FloatArray, float]:
    """Σ weight (⟨t⟩⟨t⟩ − tt), shape (3, 3, 3, 3) in 1/Å⁶, and the least exponent of the density of the cloud."""
    averaged, _, reach = smeared_pair_tensors(vectors, covariance)
    sharp = pair_tensors(vectors)
    one, other = (x.reshape(-1, 9) / DIPOLE_T_A3_PER_MUB for x in (averaged - sharp, averaged + sharp))
    # Of the product of a difference and a sum only the part that is alike in both pairs of indices counts.
    product = one.T @ (weight[:, None] * other)
    return ((product + product.T) / 2).reshape(3, 3, 3, 3), float(reach.min(initial=np.inf))


def _weight(length: FloatArray, radius: float) -> FloatArray:
    """1 up to the inner radius, 0 from the outer one on, smooth between them."""
    inside = np.clip((length / radius - INNER) / (1 - INNER), 0.0, 1.0)
    return np.asarray(1.0 - betainc(ORDER, ORDER, inside))


def _left_out(covariance: FloatArray, radius: float) -> FloatArray:
    """∫ (1 − weight) (⟨t⟩⟨t⟩ − tt) d³r, shape (3, 3, 3, 3) in 1/Å³. Beyond the radius the variable is 1/r."""
    cosine, share = np.polynomial.legendre.leggauss(COSINES)
    azimuth = 2 * np.pi * (np.arange(AZIMUTHS) + 0.5) / AZIMUTHS
    sine = np.sqrt(1 - cosine**2)
    unit = np.stack(
        [
            np.outer(sine, np.cos(azimuth)).ravel(),
            np.outer(sine, np.sin(azimuth)).ravel(),
            np.repeat(cosine, AZIMUTHS),
        ],
        axis=1,
    )
    solid = np.repeat(share * 2 * np.pi / AZIMUTHS, AZIMUTHS)
    at, step = np.polynomial.legendre.leggauss(RIM)
    rim = radius * (INNER + (1 - INNER) * (at + 1) / 2)
    rim_steps = radius * (1 - INNER) / 2 * step * rim**2 * (1 - _weight(rim, radius))
    at, step = np.polynomial.legendre.leggauss(BEYOND)
    far = 2 * radius / (at + 1)
    far_steps = step / (2 * radius) * far**4
    lengths, steps = np.concatenate([rim, far]), np.concatenate([rim_steps, far_steps])
    vectors = (lengths[:, None, None] * unit).reshape(-1, 3)
    return _changes(vectors, np.outer(steps, solid).ravel(), covariance)[0]


def _power_tensor(products: FloatArray) -> FloatArray:
    """Shape (..., 3, 3, 3, 3). Q of sums of products ⟨t⟩_ab ⟨t⟩_cd of symmetric traceless tensors."""
    square = np.einsum("...accb->...ab", products)
    whole = np.einsum("...aa->...", square)[..., None, None] / 6
    second = (square - whole * np.eye(3)) / 3
    pairs = products + 6 * np.einsum("...ab,cd->...abcd", second, np.eye(3))
    pairs = pairs - (whole[..., None, None] * np.einsum("ab,cd->abcd", np.eye(3), np.eye(3)))
    # The mean over three ways to pair the indices, each symmetric under exchange of its two pairs.
    pairs = (pairs + np.einsum("...abcd->...cdab", pairs)) / 2
    return np.asarray((pairs + np.einsum("...abcd->...acbd", pairs) + np.einsum("...abcd->...adcb", pairs)) / 27)
