"""Energies of many candidates that share one Coupling, as quadratic forms of their components.

The energy of candidate x is x†Hx with H Hermitian. A complex row is a real one of twice the length (real and imaginary
part in turn, as it lies in memory), so that one compiled loop does both.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_complex
from latticedip.errors import InputError
from latticedip.kernels.jit import over_rows
from latticedip.kernels.quadratic import quadratic_forms
from latticedip.kernels.signs import GROUP, ROWS, sign_forms

#: Numbers converted or checked at one time, where the candidates are not yet doubles.
BLOCK_NUMBERS = 2**20
#: With fewer sign patterns than this the tables of `sign_forms` cost more than they save.
FEW_PATTERNS = 4096


class ImaginaryPartError(Exception):
    """A moment has an imaginary part where k and −k are the same vector; the caller knows k and says so."""


def half_form(matrix: FloatArray | ComplexArray) -> FloatArray:
    """A real symmetric or Hermitian form (m, m) as `quadratic_forms` takes it: half of it, padded to groups of four."""
    whole = np.asarray(matrix)
    if np.iscomplexobj(whole):
        m = 2 * len(whole)
        paired = np.empty((m, m))
        paired[0::2, 0::2] = paired[1::2, 1::2] = whole.real
        paired[1::2, 0::2] = whole.imag
        paired[0::2, 1::2] = -whole.imag
        whole = paired
    m = len(whole)
    padded = (m + 3) // 4 * 4
    group = np.arange(padded) // 4
    half = np.zeros((padded, padded))
    half[:m, :m] = whole
    half *= np.where(group[:, None] > group[None, :], 2.0, 1.0)
    return half


def quadratics(rows: FloatArray, half: FloatArray) -> FloatArray:
    """Shape (n,) float. The form of each row (n, m) of C-contiguous doubles."""
    out = np.empty(len(rows))
    over_rows(quadratic_forms, len(rows), rows, half, out, at_least=64)
    return out


def candidate_array(moments: Any, n_sites: int) -> np.ndarray:
    """Moments (n_candidates, n_sites, 3) as an array of any numeric kind, not copied where it is one.

    Raises InputError as `as_complex` does for another shape or kind; values are looked at with the energies.
    """
    raw = moments
    if not isinstance(raw, np.ndarray):
        try:
            raw = np.asarray(raw)
        except ValueError:
            return as_complex("moments", moments, (None, n_sites, 3))
    if raw.dtype.kind not in "biufc" or raw.ndim != 3 or raw.shape[1:] != (n_sites, 3):
        # The gate finds the words for what is wrong.
        return as_complex("moments", raw, (None, n_sites, 3))
    return raw


def energies_in_blocks(moments: np.ndarray, half: FloatArray) -> FloatArray:
    """Shape (n_candidates,) float. The form of every candidate, in the order given.

    moments: as `candidate_array` returns them. half: `half_form` of a Hermitian matrix where complex moments have a
    meaning, of a real one otherwise; then an imaginary part is refused.

    Doubles in order are read where they lie; anything else is converted block by block.
    Raises InputError for values that are not finite, ImaginaryPartError for imaginary parts without a meaning.
    """
    n = len(moments)
    numbers = max(1, int(np.prod(moments.shape[1:])))
    takes_complex = len(half) >= 2 * numbers
    kind = np.complex128 if takes_complex else np.float64
    out = np.empty(n)
    whole = moments.dtype == kind and moments.flags.c_contiguous
    step = max(1, n) if whole else max(64, BLOCK_NUMBERS // numbers)
    for start in range(0, n, step):
        block = moments[start : start + step]
        if block.dtype.kind == "c" and not takes_complex:
            imaginary = np.abs(block.imag).max(initial=0.0)
            if imaginary > 1e-9 * max(1.0, float(np.abs(block).max(initial=0.0))):
                raise ImaginaryPartError
            block = block.real
        rows = np.ascontiguousarray(block, dtype=kind).reshape(len(block), -1)
        out[start : start + len(block)] = quadratics(rows.view(np.float64), half)
    if not np.all(np.isfinite(out)):
        _refuse_values(moments, out)
    return out


def _refuse_values(moments: np.ndarray, energies: FloatArray) -> None:
    candidate = int(np.argmax(~np.isfinite(energies)))
    bad = np.argwhere(~np.isfinite(moments[candidate]))
    if len(bad):
        site, axis = (int(n) for n in bad[0])
        value = moments[candidate, site, axis]
        raise InputError(f"moments holds a value that is not finite: {value} at index {(candidate, site, axis)}.")
    raise InputError(f"moments: the energy of candidate {candidate} is too large for a double.")


def sign_array(signs: Any, n_sites: int) -> np.ndarray:
    """Signs (n_candidates, n_sites) as int8.

    Raises InputError for another shape or kind; that all are ±1 is checked where they are used.
    """
    raw = np.asarray(signs)
    if raw.ndim != 2 or raw.shape[1] != n_sites:
        raise InputError(f"signs must have shape (n, {n_sites}), one sign per site, got {raw.shape}.")
    if raw.dtype.kind not in "if":
        raise InputError(f"signs must be numbers +1 or −1, got an array of {raw.dtype}.")
    if raw.dtype == np.int8:
        return np.ascontiguousarray(raw)
    # Other kinds may hold values that int8 cannot, and that would wrap round to ±1.
    refuse_other_signs(raw)
    return raw.astype(np.int8)


def refuse_other_signs(signs: np.ndarray) -> None:
    """Raise InputError where an entry is neither +1 nor −1."""
    bad = (signs != 1) & (signs != -1)
    if np.any(bad):
        row, site = (int(i) for i in np.argwhere(bad)[0])
        raise InputError(f"signs must be +1 or −1, got {signs[row, site]} at index {(row, site)}.")


def sign_quadratics(signs: np.ndarray, form: FloatArray) -> FloatArray:
    """Shape (n,) float. Σ_ij s_i Q_ij s_j for rows of int8 signs, Q real symmetric (N, N).

    Raises InputError where an entry is neither +1 nor −1.
    """
    if len(signs) < FEW_PATTERNS:
        refuse_other_signs(signs)
        return quadratics(signs.astype(float), half_form(form))
    n = len(form)
    padded = -(-n // GROUP) * GROUP
    whole = np.zeros((padded, padded))
    whole[:n, :n] = form
    out = np.empty(len(signs))
    over_rows(sign_forms, len(signs), signs, whole, out, at_least=ROWS // 4)
    if np.any(np.isnan(out)):
        refuse_other_signs(signs)
    return out
