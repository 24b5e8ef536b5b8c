"""latticedip: dipolar lattice sums, local fields, energies and rankings for magnetic materials.

Names are resolved on first use, so that importing the package costs nothing.
"""

from __future__ import annotations

import importlib
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "Contact": "latticedip.probe",
    "Coupling": "latticedip.physics.coupling",
    "Crystal": "latticedip.crystal.model",
    "Displaced": "latticedip.crystal.displace",
    "Energy": "latticedip.physics.energy",
    "LatticedipError": "latticedip.errors",
    "LocalField": "latticedip.physics.field",
    "Ordering": "latticedip.ordering.model",
    "Probe": "latticedip.probe",
    "Ranking": "latticedip.analysis.rank",
    "Sample": "latticedip.sample",
    "Study": "latticedip.study.schema",
    "Susceptibility": "latticedip.observables.susceptibility",
    "coupling_tensor": "latticedip.observables.coupling_tensor",
    "domains": "latticedip.ordering.domains",
    "dipolar_energy": "latticedip.physics.energy",
    "dipole_tensor": "latticedip.sums",
    "field_uncertainty": "latticedip.physics.uncertainty",
    "linewidth": "latticedip.observables.linewidth",
    "field_ellipse": "latticedip.physics.ellipse",
    "local_field": "latticedip.physics.field",
    "lowest_mode": "latticedip.analysis.modes",
    "orbit": "latticedip.crystal.orbit",
    "orbit_field": "latticedip.observables.orbits",
    "paramagnetic_shift": "latticedip.observables.shift",
    "polarization": "latticedip.observables.polarization",
    "propose": "latticedip.analysis.propose",
    "rank": "latticedip.analysis.rank",
    "read_crystal": "latticedip.files.read",
    "read_ordering": "latticedip.files.read",
    "read_study": "latticedip.study.schema",
    "run_batch": "latticedip.study.batch",
    "shift_curve": "latticedip.observables.shift",
    "spectrum": "latticedip.observables.spectrum",
    "weighted_field": "latticedip.physics.weighted",
    "write_ordering": "latticedip.files.write",
}

__all__ = ["__version__", *sorted(_HOMES)]


def __getattr__(name: str) -> Any:
    try:
        home = _HOMES[name]
    except KeyError:
        raise AttributeError(f"module 'latticedip' has no attribute {name!r}") from None
    value = getattr(importlib.import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return __all__
