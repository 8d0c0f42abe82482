"""Time courses of species: one line by its formula, spin systems by an independent simulator."""

from __future__ import annotations

import numpy as np
import pytest
from nmrsim.qm import secondorder_dense

from recon.basis import magnetisation_per_mM, species_basis, time_course
from recon.demo import instrument
from recon.errors import InputError
from recon.physics.magnetisation import curie_magnetisation
from recon.protocol import Protocol
from recon.species_table import species_named
from recon.specimen import Species

TIMES = np.arange(64) * 4e-3


def lactate(**changes) -> Species:
    fields = {
        "name": "lactate",
        "shift_ppm": 1.31,
        "equivalent_nuclei": 4,
        "t2_star_ms": 150.0,
        "t1_s": 1.5,
        "diffusion_um2_per_ms": 0.2,
        "polarisation": 0.01,
        "spin_system": "lactate",
    }
    return Species(**(fields | changes))


def test_spin_system_against_nmrsim():
    """CH and CH3 of lactate at 0.1 T, strongly coupled: all lines from nmrsim (Δν/J = 1.7)."""
    weak = instrument().model_copy(update={"bias_field_mT": (0.0, 0.0, 100.0)})
    course = time_course(lactate(), weak, TIMES, 4.70)
    group = species_named("lactate").groups[0]
    system = group.system()
    f = weak.larmor_frequency
    counts = [int(n) for n in system.counts]
    owner = [spin for spin, count in enumerate(counts) for _ in range(count)]
    shifts = [(system.shifts_ppm[spin] - 4.70) * 1e-6 * f + 1000 for spin in owner]
    couplings = np.array(
        [[system.couplings[a, b] if a != b else 0.0 for b in owner] for a in owner]
    )
    lines = np.array(secondorder_dense(shifts, couplings))
    signal = np.exp(-2j * np.pi * np.outer(TIMES, lines[:, 0] - 1000)) @ lines[:, 1]
    signal = signal / lines[:, 1].sum() * np.exp(-TIMES / 0.15)
    np.testing.assert_allclose(course, signal, atol=3e-3)
    assert course[0] == pytest.approx(1.0)


def test_doublet_is_not_a_single_line():
    """The signal of the coupled system beats with J where a single line would only decay."""
    coupled = time_course(lactate(), instrument(), TIMES, 4.70)
    single = time_course(lactate(spin_system=None), instrument(), TIMES, 4.70)
    assert np.abs(single) == pytest.approx(np.exp(-TIMES / 0.15))
    assert np.abs(coupled).min() < 0.5 * np.abs(single).min()


def test_thermal_magnetisation_follows_curie():
    """1 mM of one proton by the Curie law."""
    one = lactate(polarisation=None, equivalent_nuclei=1, spin_system=None)
    expected = curie_magnetisation(6.02214076e23, 0.25, 298.15)
    assert magnetisation_per_mM((one,), instrument())[0] == pytest.approx(expected, rel=1e-6)


def test_basis_is_course_times_magnetisation():
    protocol = Protocol.plain(np.zeros((1, 3)), np.zeros((1, 2)), 1, TIMES)
    species = (lactate(), lactate(name="b", spin_system=None))
    basis = species_basis(species, instrument(), protocol)
    assert basis.shape == (64, 2)
    np.testing.assert_allclose(basis[0], magnetisation_per_mM(species, instrument()))


@pytest.mark.parametrize(
    "changes, says",
    [
        ({"spin_system": "lactat"}, "did you mean 'lactate'"),
        ({"equivalent_nuclei": 3}, "its spin system has 4"),
        ({"spin_system": "none.toml"}, "none.toml"),
    ],
)
def test_refusals(changes, says):
    with pytest.raises(InputError, match=says):
        time_course(lactate(**changes), instrument(), TIMES, 4.70)
