"""The spread of a position: a Gaussian cloud with one rms displacement, or with a covariance (displacement tensor)."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray, as_float, as_floats, frozen
from latticedip.errors import InputError

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal, Operations

#: Largest rms displacement (Å) along any direction that is taken for motion about one position.
MAX_SPREAD_A = 5.0
#: A tensor may miss its symmetry, or an eigenvalue be negative, by this fraction: typed digits.
ROUNDING = 1e-6
#: Images of a site under an operation may miss an atom by this much (Å).
SITE_MATCH_A = 0.02
#: Turned tensors that differ by less than this fraction are one.
SAME_TENSOR = 1e-3


def as_spread(name: str, value: Any) -> float | FloatArray | None:
    """A spread as users give it: rms displacement along each axis in Å (a number), or a (3, 3) covariance in Å².

    Returns None, a float or a read-only symmetric (3, 3) array. Raises InputError for another shape, values that are
    not finite, a tensor that is not symmetric or has a negative eigenvalue, and an rms displacement beyond 5 Å.
    """
    if value is None:
        return None
    if np.ndim(value) == 0:
        return as_float(f"{name} (rms displacement along each axis in Å)", value, low=0.0, high=MAX_SPREAD_A)
    tensor = as_floats(name, value, (3, 3))
    scale = float(np.abs(tensor).max())
    if np.abs(tensor - tensor.T).max() > ROUNDING * scale:
        raise InputError(f"{name} must be a symmetric covariance in Å², got {tensor.tolist()}.")
    tensor = (tensor + tensor.T) / 2
    eigenvalues = np.linalg.eigvalsh(tensor)
    if eigenvalues[0] < -ROUNDING * scale:
        raise InputError(
            f"{name} must be a covariance in Å² without negative eigenvalues, got {tensor.tolist()} with the "
            f"eigenvalue {eigenvalues[0]:.4g}."
        )
    if eigenvalues[2] > MAX_SPREAD_A**2:
        raise InputError(
            f"{name} holds a mean square displacement of {eigenvalues[2]:.4g} Å²; at most {MAX_SPREAD_A**2:g} Å² are "
            "taken for motion about one position."
        )
    return frozen(tensor)


def covariance_of(spread: float | FloatArray | None) -> FloatArray:
    """Shape (3, 3) float in Å². Cartesian covariance of a checked spread; zero for None."""
    if spread is None:
        return np.zeros((3, 3))
    return spread**2 * np.eye(3) if isinstance(spread, float) else np.asarray(spread)


def covariance_from_Uij(crystal: Crystal, Uij: Any) -> FloatArray:
    """Shape (3, 3) float in Å². Cartesian covariance of a displacement tensor U11, U22, U33, U12, U13, U23 in Å².

    The components are those of the factor exp(−2π² Σ h_i h_j a*_i a*_j U_ij) of crystallography, in the axes of the
    crystal: with N = diag(a*, b*, c*) and A the matrix whose columns are the cell vectors, it is A N U N Aᵀ.

    Raises InputError as `as_spread`.
    """
    u = as_floats("Uij", Uij, (6,))
    tensor = np.array([[u[0], u[3], u[4]], [u[3], u[1], u[5]], [u[4], u[5], u[2]]])
    turn = np.linalg.norm(np.linalg.inv(crystal.cell), axis=0)[:, None] * crystal.cell
    return np.asarray(as_spread("Uij", turn.T @ tensor @ turn))


def turned_covariance(crystal: Crystal, rotation: Any, covariance: FloatArray) -> FloatArray:
    """Shape (3, 3) float in Å². A Cartesian covariance carried by an operation with this fractional rotation (3, 3)."""
    turn = crystal.cell.T @ np.asarray(rotation, dtype=float) @ np.linalg.inv(crystal.cell.T)
    return np.asarray(turn @ covariance @ turn.T)


def carriers(crystal: Crystal, operations: Operations, first: int, other: int) -> np.ndarray:
    """Indices of the operations of a crystal (those of `operations_of`) that carry one site onto another."""
    gap = operations.rotations @ crystal.positions[first] + operations.translations - crystal.positions[other]
    gap -= np.round(gap)
    return np.flatnonzero(np.linalg.norm(gap @ crystal.cell, axis=1) < SITE_MATCH_A)


def carried_spreads(
    crystal: Crystal, sites: Sequence[int], spread: float | FloatArray | None, name: str
) -> list[float | FloatArray | None]:
    """The spread of each of some equivalent sites, where it is stated for the first of them.

    A tensor is turned by an operation of the crystal that carries the first site onto the other.

    Raises InputError, naming ``name``, where there is no such operation or where two of them disagree: the tensor then
    lacks the symmetry of its site.
    """
    from latticedip.crystal.symmetry import operations_of

    if spread is None or isinstance(spread, float):
        return [spread] * len(sites)
    operations = operations_of(crystal)
    found: list[float | FloatArray | None] = []
    for site in sites:
        chosen = operations.rotations[carriers(crystal, operations, sites[0], site)]
        if site == sites[0] and not len(chosen):
            chosen = np.eye(3)[None]
        turned = [turned_covariance(crystal, rotation, spread) for rotation in chosen]
        if not turned:
            raise InputError(
                f"{name}: a covariance is stated for the first of {len(sites)} atoms, but no operation of the crystal "
                f"carries it to atom {crystal.labels[site]} (number {site + 1}). Give that atom a probe of its own."
            )
        scale = float(np.abs(spread).max())
        if len(sites) > 1 and any(np.abs(other - turned[0]).max() > SAME_TENSOR * scale for other in turned):
            raise InputError(
                f"{name}: the covariance {spread.tolist()} does not have the symmetry of its site "
                f"{crystal.labels[sites[0]]}, so that it does not say how the other {len(sites) - 1} atoms move. "
                "Symmetrize it, or give each atom a probe of its own."
            )
        found.append(frozen(spread if site == sites[0] else turned[0]))
    return found
