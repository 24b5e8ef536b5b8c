"""Standard uncertainties of Fourier amplitudes: the independent parameters behind them, and what each changes.

An amplitude may be uncertain in its cosine and in its sine, along three axes, at several k; symmetry makes some of
these numbers follow from others, on one atom or on many. One parameter is therefore described by what it does: the
change of every component S_kj when the parameter changes by one standard uncertainty.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_complex, frozen
from latticedip.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from latticedip.crystal.model import Crystal


#: Largest change by one standard uncertainty (µB), as large as the largest moment.
LARGEST_STEP_MUB = 1e6


@dataclass(frozen=True, eq=False)
class AmplitudeUncertainty:
    """One independent parameter of the Fourier amplitudes of an ordering.

    sites: indices of the n atoms whose components it changes.
    steps: Shape (n_k, n, 3) complex, Cartesian µB. Change of the components of these atoms, at the k of the ordering in
        their order, by one standard uncertainty; a step of a cosine amplitude counted in cells is real, one of a sine
        amplitude imaginary.

    Raises InputError for sites that are no distinct indices, steps of another shape, and steps beyond 1e6 µB.
    """

    sites: tuple[int, ...]
    steps: Any

    def __post_init__(self) -> None:
        sites = np.asarray(self.sites)
        if sites.ndim != 1 or sites.dtype.kind not in "iu" or np.any(sites < 0) or len(set(sites)) != len(sites):
            raise InputError(f"sites of an AmplitudeUncertainty must be distinct indices of atoms, got {self.sites!r}.")
        object.__setattr__(self, "sites", tuple(int(site) for site in sites))
        steps = as_complex("steps", self.steps, (None, len(sites), 3))
        if (largest := float(np.abs(steps).max(initial=0.0))) > LARGEST_STEP_MUB:
            raise InputError(
                f"a standard uncertainty of {largest:.6g} µB is beyond {LARGEST_STEP_MUB:g} µB. Give Bohr magnetons."
            )
        object.__setattr__(self, "steps", frozen(steps))

    def turned(self, matrix: FloatArray) -> AmplitudeUncertainty:
        """The same parameter where every moment is turned by a (3, 3) matrix."""
        return AmplitudeUncertainty(self.sites, self.steps @ matrix.T)


def independent_amplitudes(crystal: Crystal, su: Any) -> tuple[AmplitudeUncertainty, ...]:
    """Every stated number of every atom as a parameter of its own, for amplitudes that count cells.

    su: Shape (n_k, n_sites, 3) complex in µB, crystal-axis components: the real part is the standard uncertainty of
    the cosine amplitude, the imaginary part that of the sine amplitude; 0 or NaN where exact or unknown.

    Raises InputError for another shape, negative and infinite numbers, and numbers beyond 1e6 µB.
    """
    stated = np.asarray(su)
    if stated.dtype.kind not in "iufc" or stated.ndim != 3 or stated.shape[1:] != (crystal.n_sites, 3):
        raise InputError(f"su must hold numbers in shape (n_k, {crystal.n_sites}, 3).")
    found = []
    for factor, part in ((1.0, stated.real), (1j, stated.imag)):
        if np.any(part < 0) or np.any(np.isinf(part)):
            raise InputError("su must hold numbers of at least 0 or NaN.")
        for k, site, axis in np.argwhere(np.nan_to_num(part) > 0):
            steps = np.zeros((len(stated), 1, 3), dtype=complex)
            steps[k, 0] = factor * part[k, site, axis] * crystal.axes_unit[axis]
            found.append(AmplitudeUncertainty((int(site),), steps))
    return tuple(found)


def moments_covariance(
    parameters: Sequence[AmplitudeUncertainty], k: FloatArray, cells: FloatArray, n_sites: int
) -> FloatArray:
    """Shape (n_cells, n_sites, 3, 3) float in µB². Of the Cartesian moments of single atoms; NaN where none is stated.

    k: Shape (n_k, 3). cells: Shape (n_cells, 3), whole numbers.
    """
    covariance = np.zeros((len(cells), n_sites, 3, 3))
    stated = np.zeros(n_sites, dtype=bool)
    phases = np.exp(-2j * np.pi * ((cells @ k.T) % 1.0))
    for parameter in parameters:
        sites = list(parameter.sites)
        step = np.einsum("ck,kja->cja", phases, parameter.steps).real
        covariance[:, sites] += step[..., :, None] * step[..., None, :]
        stated[sites] = True
    covariance[:, ~stated] = np.nan
    return covariance


def aligned_parameters(
    parameters: Sequence[AmplitudeUncertainty], n_k: int, n_sites: int
) -> tuple[AmplitudeUncertainty, ...]:
    """The parameters of an ordering with so many k and atoms, checked.

    Raises InputError for other objects, for steps at another number of k, and for atoms that are not there.
    """
    if not isinstance(parameters, (tuple, list)):
        raise InputError(
            f"amplitude_su must be a tuple of AmplitudeUncertainty objects, got {type(parameters).__name__}."
        )
    for i, parameter in enumerate(parameters):
        if not isinstance(parameter, AmplitudeUncertainty):
            raise InputError(
                f"amplitude_su must hold AmplitudeUncertainty objects, got {type(parameter).__name__} at index {i}."
            )
        if len(parameter.steps) != n_k:
            raise InputError(f"amplitude_su[{i}] has steps at {len(parameter.steps)} k, but the ordering has {n_k}.")
        if max(parameter.sites, default=0) >= n_sites:
            raise InputError(
                f"amplitude_su[{i}] changes the atom of index {max(parameter.sites)}, but there are {n_sites} atoms, "
                "counted from 0."
            )
    return tuple(parameters)


def without_imaginary(parameter: AmplitudeUncertainty, own_opposite: np.ndarray) -> AmplitudeUncertainty:
    """The parameter with real steps at those k (mask of shape (n_k,)) where k and −k are the same vector."""
    imaginary = parameter.steps.imag[own_opposite]
    if not np.any(imaginary):
        return parameter
    if np.abs(imaginary).max() > 1e-9 * np.abs(parameter.steps).max():
        raise InputError(
            f"amplitude_su: a step of {np.abs(imaginary).max():.6g} µB is imaginary where k and −k are the same "
            "vector, which has no meaning there. Give real steps."
        )
    steps: ComplexArray = np.array(parameter.steps)
    steps[own_opposite] = steps[own_opposite].real
    return AmplitudeUncertainty(parameter.sites, steps)
