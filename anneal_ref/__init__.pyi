from anneal_ref.backends.contract import Plan as Plan
from anneal_ref.backends.exact.state_vector import StateVector as StateVector
from anneal_ref.backends.fermions.free_fermions import FreeFermions as FreeFermions
from anneal_ref.backends.mps.mps import MPS as MPS
from anneal_ref.base.errors import (
    AnnealRefError as AnnealRefError,
)
from anneal_ref.base.errors import (
    AnnealRefWarning as AnnealRefWarning,
)
from anneal_ref.base.errors import (
    ArchiveError as ArchiveError,
)
from anneal_ref.base.errors import (
    InputError as InputError,
)
from anneal_ref.base.errors import (
    NotConverged as NotConverged,
)
from anneal_ref.base.errors import (
    NotSupported as NotSupported,
)
from anneal_ref.base.errors import (
    StudyError as StudyError,
)
from anneal_ref.base.errors import (
    TooLarge as TooLarge,
)
from anneal_ref.base.estimate import (
    Estimate as Estimate,
)
from anneal_ref.base.estimate import (
    Score as Score,
)
from anneal_ref.base.run import Run as Run
from anneal_ref.ground.ground import (
    GroundEnergy as GroundEnergy,
)
from anneal_ref.ground.ground import (
    ground_energy as ground_energy,
)
from anneal_ref.ground.ground import (
    ground_states as ground_states,
)
from anneal_ref.judgement.compare import compare as compare
from anneal_ref.judgement.comparison import Comparison as Comparison
from anneal_ref.judgement.equivalence import (
    Acceptance as Acceptance,
)
from anneal_ref.judgement.equivalence import (
    Decision as Decision,
)
from anneal_ref.judgement.growth import (
    Growth as Growth,
)
from anneal_ref.judgement.growth import (
    fit_growth as fit_growth,
)
from anneal_ref.judgement.matching import (
    Matching as Matching,
)
from anneal_ref.judgement.matching import (
    matching_bond_dimension as matching_bond_dimension,
)
from anneal_ref.judgement.pooling import (
    Pooled as Pooled,
)
from anneal_ref.judgement.pooling import (
    pool as pool,
)
from anneal_ref.model import disorder as disorder
from anneal_ref.model import lattices as lattices
from anneal_ref.model.anneal import (
    Anneal as Anneal,
)
from anneal_ref.model.anneal import (
    Waveform as Waveform,
)
from anneal_ref.model.instances import (
    Instance as Instance,
)
from anneal_ref.model.instances import (
    draw_instance as draw_instance,
)
from anneal_ref.model.lattice import Lattice as Lattice
from anneal_ref.model.schedules import Schedule as Schedule
from anneal_ref.observe import observables as observables
from anneal_ref.observe.manifest import Manifest as Manifest
from anneal_ref.observe.moments import Moments as Moments
from anneal_ref.observe.samples import Samples as Samples
from anneal_ref.observe.source import Source as Source
from anneal_ref.studies.archive import Archive as Archive
from anneal_ref.studies.assess import (
    Verdict as Verdict,
)
from anneal_ref.studies.assess import (
    assess as assess,
)
from anneal_ref.studies.study import Study as Study
from anneal_ref.truth.convergence import (
    Convergence as Convergence,
)
from anneal_ref.truth.convergence import (
    converge as converge,
)
from anneal_ref.truth.inputs import InputUncertainty as InputUncertainty
from anneal_ref.truth.reference import (
    Reference as Reference,
)
from anneal_ref.truth.reference import (
    reference as reference,
)
from anneal_ref.truth.refining import Budget as Budget
from anneal_ref.truth.uncertainty import (
    UncertaintyBudget as UncertaintyBudget,
)
from anneal_ref.truth.uncertainty import (
    uncertainty_budget as uncertainty_budget,
)
from anneal_ref.views import plots as plots

__version__: str
