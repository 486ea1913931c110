"""Ground truth with error bars for programmable analog Ising processors.

    i d|psi>/dt = H(t/T) |psi>
    H(s) = -G(s) sum_i w_i X_i + P(s) [ sum_(i,j) J_ij Z_i Z_j + sum_i h_i Z_i ]

The public names load on first use, so that importing the package costs nothing. The README shows them at work.
"""

from __future__ import annotations

import importlib
from typing import Any

_ROOMS = {
    "anneal_ref.base.errors": (
        "AnnealRefError", "AnnealRefWarning", "ArchiveError", "InputError", "NotConverged", "NotSupported",
        "StudyError", "TooLarge",
    ),
    "anneal_ref.base.estimate": ("Estimate", "Score"),
    "anneal_ref.base.run": ("Run",),
    "anneal_ref.model.lattice": ("Lattice",),
    "anneal_ref.model.instances": ("Instance", "draw_instance"),
    "anneal_ref.model.schedules": ("Schedule",),
    "anneal_ref.model.anneal": ("Anneal", "Waveform"),
    "anneal_ref.ground.ground": ("GroundEnergy", "ground_energy", "ground_states"),
    "anneal_ref.observe.moments": ("Moments",),
    "anneal_ref.observe.source": ("Source",),
    "anneal_ref.observe.samples": ("Samples",),
    "anneal_ref.observe.manifest": ("Manifest",),
    "anneal_ref.backends.contract": ("Plan",),
    "anneal_ref.backends.exact.state_vector": ("StateVector",),
    "anneal_ref.backends.mps.mps": ("MPS",),
    "anneal_ref.backends.fermions.free_fermions": ("FreeFermions",),
    "anneal_ref.truth.reference": ("Reference", "reference"),
    "anneal_ref.truth.refining": ("Budget",),
    "anneal_ref.truth.inputs": ("InputUncertainty",),
    "anneal_ref.truth.uncertainty": ("UncertaintyBudget", "uncertainty_budget"),
    "anneal_ref.truth.convergence": ("Convergence", "converge"),
    "anneal_ref.judgement.compare": ("compare",),
    "anneal_ref.judgement.comparison": ("Comparison",),
    "anneal_ref.judgement.equivalence": ("Acceptance", "Decision"),
    "anneal_ref.judgement.pooling": ("Pooled", "pool"),
    "anneal_ref.judgement.matching": ("Matching", "matching_bond_dimension"),
    "anneal_ref.judgement.growth": ("Growth", "fit_growth"),
    "anneal_ref.studies.archive": ("Archive",),
    "anneal_ref.studies.study": ("Study",),
    "anneal_ref.studies.assess": ("Verdict", "assess"),
}  # fmt: skip
_MODULES = {
    "lattices": "anneal_ref.model.lattices",
    "disorder": "anneal_ref.model.disorder",
    "observables": "anneal_ref.observe.observables",
    "plots": "anneal_ref.views.plots",
}
_HOME = {name: module for module, names in _ROOMS.items() for name in names}

__all__ = ["__version__", *sorted([*_HOME, *_MODULES])]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from anneal_ref.base.provenance import library_version

        value: Any = library_version()
    elif name in _HOME:
        value = getattr(importlib.import_module(_HOME[name]), name)
    elif name in _MODULES:
        value = importlib.import_module(_MODULES[name])
    else:
        raise AttributeError(f"module 'anneal_ref' has no attribute {name!r}; see dir(anneal_ref)")
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return __all__
