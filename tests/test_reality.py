"""Records of a real apparatus through the same reconstruction."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from recon.cli import main
from recon.forward.channels import Channels
from recon.forward.off_lattice import calibrated
from recon.priors import NonNegative, TotalVariation
from recon.reconstruct import Reality, reconstruct
from recon.record import Record
from recon.simulate import simulate
from recon.solvers.penalised import Penalised
from recon.solvers.weight import Fixed
from tests.test_grouped import indirect  # noqa: F401

SPARSE = Penalised((TotalVariation(), NonNegative()), weight=Fixed(0.5), replicas=None)


@pytest.fixture(scope="module")
def scene(indirect):  # noqa: F811
    """Two discs of two species on a camera of 32 x 32 pixels; direct axis, on the lattice."""
    specimen, record = indirect
    protocol = replace(
        record.protocol,
        evolution_time=np.zeros(len(record.protocol)),
        sample_times=np.arange(6) * 12e-3,
    )
    return specimen, record.instrument, protocol


def error(maps, specimen) -> float:
    truth = specimen.concentrations
    return float(np.linalg.norm(maps.values - truth) / np.linalg.norm(truth))


def test_dead_pixels_and_vignetting(scene):
    """5 % dead, gain falling to 0.7: modelled, the error is that of the ideal record."""
    specimen, apparatus, protocol = scene
    record = simulate(specimen, apparatus, protocol, seed=2)
    rng = np.random.default_rng(0)
    y, x = np.mgrid[-1:1:32j, -1:1:32j]
    gain = 1 - 0.15 * (x**2 + y**2)
    dead = rng.random(gain.shape) < 0.05
    samples = record.samples_in_memory() * np.where(dead, 0, gain).astype(np.float32)
    flawed = Record.from_arrays(
        apparatus, protocol, samples, specimen.description_json(), noise_sd=record.noise_sd
    )
    channels = Channels.ideal(gain.shape).with_gain(gain).without(dead)
    ideal = error(reconstruct(record, None, SPARSE), specimen)
    known = error(reconstruct(flawed, None, SPARSE, reality=Reality(channels)), specimen)
    ignored = error(reconstruct(flawed, None, SPARSE), specimen)
    assert known < 1.1 * ideal
    assert ignored > 1.15 * known


def test_sheared_gradients(scene):
    """Calibrated wavevectors lie off the lattice; taken as nominal they cost."""
    specimen, apparatus, nominal = scene
    shear = np.array([[1.02, 0.03, 0], [0.0, 0.97, 0], [0, 0, 1.0]])
    true = calibrated(nominal, nuclear=shear)
    record = simulate(specimen, apparatus, true, seed=3)
    found = reconstruct(record, None, SPARSE)
    stated = reconstruct(record, None, SPARSE, reality=Reality())
    assert np.array_equal(found.values, stated.values)
    known = error(found, specimen)
    wrong = Record.from_arrays(
        apparatus,
        nominal,
        record.samples_in_memory(),
        specimen.description_json(),
        noise_sd=record.noise_sd,
    )
    assert known < 0.8 * error(reconstruct(wrong, None, SPARSE), specimen)


def test_verb_takes_gains(scene, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    specimen, apparatus, protocol = scene
    simulate(specimen, apparatus, protocol, seed=2, path="record.h5")
    gain = np.ones((32, 32))
    gain[3, 4] = 0
    np.save("gain.npy", gain)
    command = ["reconstruct", "record.h5", "--replicas", "0", "--weight", "0.5"]
    main([*command, "--channel-gain", "gain.npy"])
    assert "result.h5" in capsys.readouterr().out
    np.save("bad.npy", np.ones(5))
    (tmp_path / "text.npy").write_text("no")
    for wrong in ("bad.npy", "text.npy", "none.npy"):
        with pytest.raises(SystemExit) as leaving:
            main([*command, "--channel-gain", wrong, "-o", "new.h5"])
        assert leaving.value.code == 2
        assert not (tmp_path / "new.h5").exists()
