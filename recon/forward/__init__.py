"""The forward model: from magnetisation on the voxel grid to field samples, and back.

`model` gathers the numbers, `operator` applies A and Aᴴ, `statistics` reads a record once, and
`blocks` holds the normal operator AᴴWA, which is block-diagonal in the object's lateral
frequency. Nothing here knows a prior or a solver.
"""

from recon.forward.blocks import BlockQuadratic
from recon.forward.lattice import LatticeEncoding
from recon.forward.model import ForwardModel
from recon.forward.operator import ForwardOperator
from recon.forward.statistics import Statistics, accumulate

__all__ = [
    "BlockQuadratic",
    "ForwardModel",
    "ForwardOperator",
    "LatticeEncoding",
    "Statistics",
    "accumulate",
]
