"""Energies of many candidates as matrix products, block by block.

The energy of candidate x is a quadratic form of its 3N components, x†Hx with H Hermitian. Only half of H is needed:
it is cut into panels of columns, of each only the rows down to the diagonal are multiplied, and what lies off the
diagonal counts twice.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_complex
from latticedip.errors import InputError
from latticedip.kernels.jit import over_rows
from latticedip.kernels.signs import GROUP, ROWS, sign_forms

#: Numbers in one block of candidates: a few MB, so that a block stays in the cache between product and dot product.
BLOCK_NUMBERS = 2**19
#: Narrowest panel: narrower ones lose more in the matrix product than they save.
PANEL = 96
#: With fewer sign patterns than this the tables of `sign_forms` cost more than they save.
FEW_PATTERNS = 4096


class ImaginaryPartError(Exception):
    """A moment has an imaginary part where k and −k are the same vector; the caller knows k and says so."""


class QuadraticForm:
    """x†Hx for rows x, H Hermitian; panels of H are laid out once.

    matrix: Shape (m, m), real symmetric or Hermitian.
    """

    def __init__(self, matrix: FloatArray | ComplexArray) -> None:
        self.size = len(matrix)
        self.dtype = matrix.dtype
        count = max(1, self.size // PANEL)
        edges = [self.size * i // count for i in range(count + 1)]
        self.panels = []
        for low, high in zip(edges[:-1], edges[1:], strict=True):
            # Conjugated, so that rows are multiplied as they come: conj(x H) = conj(x) conj(H).
            panel = np.array(matrix[:high, low:high].conj(), order="C")
            panel[:low] *= 2.0
            self.panels.append((low, high, panel))

    @property
    def block_rows(self) -> int:
        """Rows to pass at one time."""
        return max(64, BLOCK_NUMBERS // max(1, self.size))

    def __call__(self, rows: FloatArray | ComplexArray) -> FloatArray:
        """Shape (n,) float. The form of each of n C-contiguous rows of the matrix's own kind."""
        total = np.zeros(len(rows))
        for low, high, panel in self.panels:
            product = rows[:, :high] @ panel
            part = rows[:, low:high]
            if np.iscomplexobj(product):
                # Re conj(y) x is the dot product of the two as pairs of real numbers.
                total += np.einsum("ci,ci->c", product.view(float), np.ascontiguousarray(part).view(float))
            else:
                total += np.einsum("ci,ci->c", product, part)
        return total


def candidate_array(moments: Any, n_sites: int) -> np.ndarray:
    """Moments (n_candidates, n_sites, 3) as an array of any numeric kind, not copied where it is one.

    Raises InputError as `as_complex` does for another shape or kind; values are looked at block by block.
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


def energies_in_blocks(moments: np.ndarray, real: QuadraticForm, general: QuadraticForm | None) -> FloatArray:
    """Shape (n_candidates,) float. The form of every candidate, in the order given.

    real: for real moments. general: for complex ones; None where imaginary parts have no meaning.

    Raises InputError for values that are not finite, ImaginaryPartError for imaginary parts without a meaning.
    """
    out = np.empty(len(moments))
    is_complex = moments.dtype.kind == "c"
    form = general if is_complex and general is not None else real
    kind = np.complex128 if form is general else np.float64
    for start in range(0, len(moments), form.block_rows):
        block = moments[start : start + form.block_rows]
        if is_complex and general is None:
            imaginary = np.abs(block.imag).max(initial=0.0)
            if imaginary > 1e-9 * max(1.0, float(np.abs(block).max(initial=0.0))):
                raise ImaginaryPartError
            block = block.real
        rows = np.ascontiguousarray(block, dtype=kind).reshape(len(block), -1)
        with np.errstate(invalid="ignore", over="ignore"):
            part = form(rows)
        if not np.all(np.isfinite(part)):
            _refuse_values(block, start, part)
        out[start : start + len(block)] = part
    return out


def _refuse_values(block: np.ndarray, start: int, energies: FloatArray) -> None:
    bad = ~np.isfinite(block)
    if np.any(bad):
        i, site, axis = (int(n) for n in np.argwhere(bad)[0])
        raise InputError(
            f"moments holds a value that is not finite: {block[i, site, axis]} at index {(start + i, site, axis)}."
        )
    i = int(np.argmax(~np.isfinite(energies)))
    raise InputError(f"moments: the energy of candidate {start + i} is too large for a double.")


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
        where = tuple(int(i) for i in np.argwhere(bad)[0])
        raise InputError(f"signs must be +1 or −1, got {signs[where]} at index {where}.")


def sign_quadratics(signs: np.ndarray, form: FloatArray) -> FloatArray:
    """Shape (n,) float. Σ_ij s_i Q_ij s_j for rows of int8 signs, Q real symmetric (N, N).

    Raises InputError where an entry is neither +1 nor −1.
    """
    if len(signs) < FEW_PATTERNS:
        refuse_other_signs(signs)
        quadratic = QuadraticForm(form)
        rows = quadratic.block_rows
        parts = [quadratic(signs[i : i + rows].astype(float)) for i in range(0, len(signs), rows)]
        return np.concatenate([np.zeros(0), *parts])
    n = len(form)
    padded = -(-n // GROUP) * GROUP
    whole = np.zeros((padded, padded))
    whole[:n, :n] = form
    out = np.empty(len(signs))
    over_rows(sign_forms, len(signs), signs, whole, out, at_least=ROWS // 4)
    if np.any(np.isnan(out)):
        refuse_other_signs(signs)
    return out
