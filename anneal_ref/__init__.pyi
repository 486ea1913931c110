from anneal_ref.base.errors import (
    AnnealRefError as AnnealRefError,
    AnnealRefWarning as AnnealRefWarning,
    ArchiveError as ArchiveError,
    InputError as InputError,
    NotConverged as NotConverged,
    NotSupported as NotSupported,
    StudyError as StudyError,
    TooLarge as TooLarge,
)
from anneal_ref.base.estimate import (
    Estimate as Estimate,
    Score as Score,
)
from anneal_ref.base.run import Run as Run
from anneal_ref.model.lattice import Lattice as Lattice
from anneal_ref.model.instances import (
    Instance as Instance,
    draw_instance as draw_instance,
)
from anneal_ref.model.schedules import Schedule as Schedule
from anneal_ref.model.anneal import (
    Anneal as Anneal,
    Waveform as Waveform,
)
from anneal_ref.ground.ground import (
    GroundEnergy as GroundEnergy,
    ground_energy as ground_energy,
    ground_states as ground_states,
)
from anneal_ref.observe.moments import Moments as Moments
from anneal_ref.observe.source import Source as Source
from anneal_ref.observe.samples import Samples as Samples
from anneal_ref.observe.manifest import Manifest as Manifest
from anneal_ref.backends.contract import Plan as Plan
from anneal_ref.backends.exact.state_vector import StateVector as StateVector
from anneal_ref.truth.reference import (
    Reference as Reference,
    reference as reference,
)
from anneal_ref.judgement.compare import compare as compare
from anneal_ref.judgement.comparison import Comparison as Comparison
from anneal_ref.judgement.equivalence import (
    Acceptance as Acceptance,
    Decision as Decision,
)
from anneal_ref.judgement.pooling import (
    Pooled as Pooled,
    pool as pool,
)
from anneal_ref.studies.archive import Archive as Archive
from anneal_ref.studies.study import Study as Study
from anneal_ref.studies.assess import (
    Verdict as Verdict,
    assess as assess,
)
from anneal_ref.model import lattices as lattices
from anneal_ref.model import disorder as disorder
from anneal_ref.observe import observables as observables
from anneal_ref.views import plots as plots

__version__: str
