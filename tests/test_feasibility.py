"""Verdicts, sweeps and the trade's rules of thumb."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from recon.cli import main
from recon.demo import instrument
from recon.errors import InputError
from recon.planning.bound import Bound
from recon.planning.feasibility import Feasibility
from recon.planning.limits import Limits
from recon.planning.mends import block_gain, needed_gain
from recon.planning.single_volume import SingleVolume
from recon.planning.sweep import Dial, sweep
from recon.planning.tables import LowDiscrepancy, UniformRandom
from recon.planning.trains import AncillaReadout
from recon.protocol import SpectralAxis
from recon.specimen import Specimen
from tests import test_planning as planning


def feasibility(amount: float = 20.0, axis=SpectralAxis.EVOLVE_THEN_ENCODE, **changes):
    protocol = UniformRandom(shots=40, axial_bound_rad_per_um=0.3).protocol(
        planning.GRID, planning.TIMES, spectral_axis=axis
    )
    setting = planning.experiment(species=planning.SPECIES)
    return replace(Feasibility(setting, protocol, (amount, amount)), **changes)


def test_thermal_metabolite_in_a_cell_sized_voxel_is_out_of_reach():
    """10 mM thermal in 10 µm at 0.1 T and 30 pT/√Hz: about 1e7 s (common practice)."""
    apparatus = instrument().model_copy(update={"bias_field_mT": (0.0, 0.0, 100.0)})
    seconds = SingleVolume(apparatus, 10.0).seconds_to_detect(10.0)
    assert 3e6 < seconds < 6e7


def test_ten_picolitres_hyperpolarised_detect_about_a_millimolar():
    """Hertz-wide lines: 1 s; ten times better with repeated ancilla readout (common practice)."""
    volume = SingleVolume(instrument(), 21.5, polarisation=0.01)
    limit = volume.detection_limit(1.0)
    assert 0.3 < limit < 3.0
    gain = AncillaReadout(gain=30.0, dead_time_us=160.0).noise_gain(20e-6)
    assert gain == pytest.approx(10.0)
    better = replace(volume, density_pT_per_rtHz=30.0 / gain)
    assert limit / better.detection_limit(1.0) == pytest.approx(10.0)


def test_verdict_says_what_binds_and_by_what_factor():
    rich, poor = feasibility(1000.0), feasibility(0.1)
    assert "verdict: feasible" in rich.report()
    text = poor.report()
    assert "not feasible" in text
    factor = float(re.search(r"sensor noise ([\d.e+]+)", text)[1])
    assert factor == pytest.approx(float(poor.shortfall()[:, 0].max()), rel=0.02)
    assert "times the averages" in text or "no gain" in text
    assert "local rules" in text


def test_the_stated_gain_closes_the_gap():
    """With that much more signal-to-noise the amount is just detected."""
    short = feasibility(12.0)
    gain = needed_gain(short, 0, 0)
    assert gain is not None
    mended = replace(short, experiment=replace(short.experiment, noise_gain=gain))
    assert mended.shortfall()[0, 0] == pytest.approx(1.0, rel=0.03)


def test_listening_loses_what_diffuses():
    """Decay rates D⟨k²⟩ make the error larger, and a warning names the line width πD/voxel²."""
    evolving = feasibility()
    listening = feasibility(axis=SpectralAxis.LISTEN_AFTER_ENCODING)
    assert (listening.shortfall() > evolving.shortfall()).all()
    assert (listening.shortfall()[:, 0] > 1.2 * evolving.shortfall()[:, 0]).all()
    wet = tuple(
        s.model_copy(update={"diffusion_um2_per_ms": 2.3}) for s in listening.experiment.species
    )
    setting = replace(listening.experiment, species=wet)
    told = list(replace(listening, experiment=setting).warnings())
    width = np.pi * 2.3e-9 / (4e-6) ** 2
    assert any(f"{width:.3g} Hz" in text for text in told)


def test_slow_pulses_are_named():
    wet = tuple(
        s.model_copy(update={"diffusion_um2_per_ms": 2.3}) for s in feasibility().experiment.species
    )
    setting = replace(feasibility().experiment, species=wet)
    slow = replace(feasibility(), experiment=setting, limits=Limits(slew_T_per_m_s=10.0))
    assert any("crosses a voxel" in text for text in slow.warnings())


def test_averaging_voxels_lowers_the_error():
    gains = [block_gain(feasibility(), 0, 0, factor) for factor in (1, 2, 4)]
    assert gains[0] == pytest.approx(1.0)
    assert gains[0] < gains[1] < gains[2]


def test_sweep_turns_the_description():
    setting = planning.experiment(species=planning.SPECIES)
    protocol = planning.table()
    depth = Dial.parse("instrument.sensor_layer.depth_um=0.1,3")
    share = Dial.parse("species.b.polarisation=0.01,0.1")
    table = sweep(setting, protocol, depth, share, 1, 0)
    assert table.shape == (2, 2)
    assert (table[1] > table[0]).all()
    assert (table[:, 1] < table[:, 0]).all()
    bound = Bound.of(setting, protocol).detection_limit()[1, 0]
    assert table[0, 0] == pytest.approx(bound, rel=1e-6)


@pytest.mark.parametrize(
    "text, says",
    [
        ("depth=1", "names no number"),
        ("instrument.sensor_layer.depth_um=a", "is not name=number"),
        ("instrument.sensor_layer.depht_um=1", "there is no 'depht_um'"),
        ("instrument.sensor_layer.depth_um=-1", "depth_um"),
        ("species.c.polarisation=1", "unknown species 'c'"),
        ("species.a.polarisation=2", "polarisation"),
    ],
)
def test_dials_that_turn_nothing(text, says):
    setting = planning.experiment(species=planning.SPECIES)
    with pytest.raises(InputError, match=says):
        Dial.parse(text).turned(setting, planning.table(), Dial.parse(text).values[0])


def test_low_discrepancy_fills_more_evenly_than_chance():
    """Largest hole within one standard deviation of the density, mean over seeds."""
    grid = planning.GRID

    def hole(kind, seed):
        made = kind(shots=40, seed=seed).protocol(grid, [0.0]).nuclear_wavevector[:, :2]
        steps = made / np.array(grid.lattice_step[::-1])
        assert len(np.unique(steps.round(), axis=0)) == 40
        probe = np.stack(np.meshgrid(*(np.arange(-3, 4),) * 2), -1).reshape(-1, 2)
        return np.linalg.norm(probe[:, None] - steps, axis=-1).min(axis=1).max()

    from recon.planning.tables import VariableDensity

    even = np.mean([hole(LowDiscrepancy, s) for s in range(8)])
    assert even < np.mean([hole(VariableDensity, s) for s in range(8)])


@pytest.fixture
def folder(tmp_path, monkeypatch) -> Path:
    monkeypatch.chdir(tmp_path)
    planning.apparatus().to_toml("instrument.toml")
    maps = np.random.default_rng(0).uniform(0, 40, (2, *planning.GRID.shape)).astype(np.float32)
    Specimen(planning.GRID, planning.SPECIES, maps, notes="invented").save("specimen.toml")
    return tmp_path


def test_plan_verb(folder, capsys):
    main(["plan", "specimen.toml", "instrument.toml", "--shots", "12", "--samples", "8"])
    out = capsys.readouterr().out
    assert "protocol.h5: 12 shots" in out or re.search(r"protocol.h5: \d+ shots", out)
    assert "verdict" in out
    main(["simulate", "specimen.toml", "instrument.toml", "protocol.h5"])
    main(["reconstruct", "record.h5", "--replicas", "0"])
    assert Path("result.h5").exists()
    main(["plan", "specimen.toml", "instrument.toml", "--judge", "protocol.h5", "--hours", "8"])
    assert "time" in capsys.readouterr().out


def test_plan_verb_that_cannot(folder, capsys):
    for wrong in (["--duty-cycle", "0"], ["--hours", "1e-6"], ["--judge", "none.h5"]):
        with pytest.raises(SystemExit) as leaving:
            main(["plan", "specimen.toml", "instrument.toml", "-o", "new.h5", *wrong])
        assert leaving.value.code == 2
        assert len(capsys.readouterr().err.splitlines()) == 1
        assert not Path("new.h5").exists()


def test_what_if_verb(folder, capsys):
    main(["protocol", "specimen.toml", "instrument.toml", "--shots", "9", "--samples", "8"])
    capsys.readouterr()
    command = ["what-if", "specimen.toml", "instrument.toml", "protocol.h5"]
    main(
        [
            *command,
            "instrument.sensor_layer.depth_um=0.1,1",
            "species.a.t2_star_ms=50,100",
            "-o",
            "f.png",
        ]
    )
    assert "detection limit of a" in capsys.readouterr().out
    assert Path("f.png").exists()
