"""The memory stated before a reconstruction against what it takes (tracemalloc)."""

from __future__ import annotations

import tracemalloc

import numpy as np
import pytest

from recon.demo import instrument
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity
from recon.priors import NonNegative, TotalVariation, UndecimatedWaveletSparsity
from recon.reconstruct import estimate_memory, reconstruct
from recon.record import Record
from recon.solvers import Stopping
from recon.solvers.penalised import Penalised
from recon.solvers.replicas import Replicas
from recon.solvers.resolution import PointResponse
from recon.solvers.ridge import Ridge
from recon.solvers.weight import Fixed
from recon.specimen import Specimen
from recon.specimens.muscle import Muscle
from recon.unknown import ComplexCube, SpeciesAmounts


def noise_record(species=3, times=6, side=48):
    """Noise alone: memory does not depend on what is in the record."""
    grid = Grid((4, side, side), (4e-6,) * 3)
    described = instrument().model_dump(exclude_none=True)
    described["camera"]["field_of_view_um"] = (4.0 * side, 4.0 * side)
    apparatus = Instrument.model_validate(described)
    protocol = VariableDensity(shots=12).protocol(grid, np.arange(times) * 8e-3)
    some = Muscle.small().specimen((1, 1, 1)).species[:species]
    specimen = Specimen(grid, some, np.zeros((species, *grid.shape), np.float32), (1, 1, 1), "")
    rng = np.random.default_rng(0)
    white = rng.standard_normal((12, times, side, side, 2), np.float32)
    samples = white.view(np.complex64)[..., 0] * np.float32(apparatus.field_noise)
    description = specimen.description_json()
    return Record.from_arrays(
        apparatus, protocol, samples, description, noise_sd=apparatus.field_noise
    )


def penalised(*priors):
    return Penalised(
        priors,
        weight=Fixed(1.0),
        stopping=Stopping(0.0, limit=4),
        replicas=Replicas(2, 2),
        resolution=PointResponse(iterations=1),
    )


@pytest.mark.parametrize(
    "unknown, estimator",
    [
        (SpeciesAmounts(), penalised(TotalVariation(), NonNegative())),
        (SpeciesAmounts(), penalised(UndecimatedWaveletSparsity())),
        (SpeciesAmounts(), Ridge()),
        (ComplexCube(vectors=0), penalised(TotalVariation(joint=True))),
    ],
    ids=["default", "cycle-spun", "ridge", "cube"],
)
def test_stated_memory_is_within_half_of_what_is_taken(unknown, estimator):
    record = noise_record()
    stated = estimate_memory(record, unknown, estimator)
    tracemalloc.start()
    reconstruct(record, unknown, estimator)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak / 1.5 < stated < 1.5 * peak
