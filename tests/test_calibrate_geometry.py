"""Geometry of an apparatus from records that were simulated with another than the stated one.

The simulator sums the dipole formula in real space and shares nothing with the operators but the
descriptions. What it computes within a voxel, and beyond the grid's band, the estimators cannot
know: the stated allowances are for that.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from recon.calibrate.decomposition import decomposition
from recon.calibrate.estimate import Estimate
from recon.calibrate.evidence import standoff_from_record, unmixed
from recon.calibrate.geometry_fit import geometry_from_sample
from recon.calibrate.geometry_from_record import geometry_from_record
from recon.calibrate.geometry_parameters import (
    BIAS,
    LATERAL,
    LAYER,
    SENSOR_MATRIX,
    SIGNAL,
    nominal_values,
    with_geometry,
)
from recon.calibrate.gradients_fit import gradients_from_record
from recon.calibrate.shifted import block_statistics
from recon.errors import InputError, InputWarning
from recon.forward import ForwardModel, accumulate
from recon.physics.dipole import magnetisation_direction
from tests.descriptions import line
from tests.geometry_scene import FINE, GRID, apparatus, measured, noisy, table, texture

SIGNAL_TO_NOISE = (0.3, 0.6, 1.2)
SEEDS = 3
MATRIX = {
    "nuclear_matrix_xx": 1.03,
    "nuclear_matrix_xy": -0.03,
    "nuclear_matrix_yx": 0.03,
    "nuclear_matrix_yy": 0.99,
}
SAMPLE = texture(GRID, FINE, 1)
NOMINAL = apparatus()
SHOTS = table(shots=24)
FLAT = table(shots=16, axial_bound_rad_per_um=0.0)


def spread(record):
    """Root mean square of the noise-free samples."""
    return float(np.sqrt((np.abs(record.samples_in_memory()) ** 2).mean()))


def errors_in_units(records, truth, estimate, allowance):
    """Errors over standard errors at all noise levels; the mean error is checked at each.

    Every record is taken once at each level. |mean error| must stay within 3 standard errors of
    the mean plus the allowance.
    """
    every = []
    for step, level in enumerate(SIGNAL_TO_NOISE):
        fits = [
            estimate(noisy(record, spread(record) / level, 100 * step + seed))
            for seed, record in enumerate(records)
        ]
        error = np.array([[fit[name].value - truth[name] for name in truth] for fit in fits])
        unit = np.array([[fit[name].standard_error for name in truth] for fit in fits])
        of_mean = np.sqrt((unit**2).mean(axis=0) / len(records))
        assert (np.abs(error.mean(axis=0)) < 3 * of_mean + allowance).all(), (level, error, unit)
        every.append(error / unit)
    return np.concatenate(every).ravel()


def test_a_sample_that_is_known_gives_standoff_and_gradients():
    truth = {"depth_um": 1.1, "signal_scale": 1.1, "signal_phase_deg": 10.0, **MATRIX}
    record = measured(SAMPLE, NOMINAL, FLAT, truth)
    units = errors_in_units(
        [record] * SEEDS,
        truth,
        lambda noisy: geometry_from_sample(
            noisy, SAMPLE, LAYER[:1] + SIGNAL + LATERAL, shots=np.arange(10)
        ),
        allowance=np.array([0.005, 0.002, 0.05, 1e-4, 1e-4, 1e-4, 1e-4]),
    )
    # 63 errors of about a normal distribution: 68 % within one standard error
    assert 0.5 < np.mean(np.abs(units) < 1) < 0.8, units


def test_standoff_from_a_sample_nobody_knows():
    truth = {"depth_um": 1.1}
    samples = [texture(GRID, FINE, seed) for seed in range(100, 104)]
    records = [measured(sample, NOMINAL, FLAT, truth) for sample in samples]
    units = errors_in_units(records, truth, standoff_from_record, allowance=0.05)
    # 12 errors over as many samples and noises
    assert 0.4 < np.sqrt(np.mean(units**2)) < 1.5, units
    assert np.mean(np.abs(units) < 1) > 0.5, units


def test_gradients_from_a_sample_nobody_knows():
    record = measured(SAMPLE, NOMINAL, FLAT, MATRIX)
    units = errors_in_units(
        [record] * SEEDS, MATRIX, lambda noisy: gradients_from_record(noisy, components=1), 5e-4
    )
    assert 0.55 < np.mean(np.abs(units) < 1) < 0.85, units


def test_standoff_follows_gradients_that_were_calibrated():
    """Off the lattice the blocks are taken beside it; the nominal lattice leaves a misfit."""
    record = measured(SAMPLE, NOMINAL, SHOTS, {"depth_um": 1.1, **MATRIX})
    stated = [Estimate(name, "1", value, fixed=True) for name, value in MATRIX.items()]
    noise = noisy(record, spread(record), 0)
    fit = standoff_from_record(noise, LAYER[:1], stated)
    found = fit["depth_um"]
    assert abs(found.value - 1.1) < 3 * found.standard_error + 0.05, found
    assert abs(fit.misfit - 1) < 0.02
    assert standoff_from_record(noise).misfit > 1.1


@pytest.mark.parametrize("pixel_um", [4.0, 8.0])
def test_blocks_beside_the_lattice_are_the_operators_on_it(pixel_um):
    """b and G of `recon.forward`, which takes wavevectors on the lattice only."""
    apparatus = NOMINAL.model_copy(
        update={"camera": NOMINAL.camera.model_copy(update={"pixel_um": pixel_um})}
    )
    record = measured(SAMPLE, apparatus, SHOTS, {})
    data = unmixed(record, None, None)
    found = block_statistics(data, nominal_values(apparatus))
    identity = np.eye(2, dtype=complex)
    model = ForwardModel.build(GRID, apparatus, data.protocol, identity, record.noise_sd)
    wanted = accumulate(model, [(slice(0, len(data)), data.samples)])
    for name in ("linear", "normal"):
        one, other = getattr(found, name), getattr(wanted, name)
        np.testing.assert_allclose(one, other, atol=3e-6 * np.abs(other).max())


@pytest.mark.parametrize("seed", [2, 3])
def test_the_sample_does_not_distort_the_standoff(seed):
    """Other samples, smooth along z and not, give the same standoff within 0.05 µm."""
    sample = texture(GRID, FINE, seed)
    if seed == 3:
        upright = np.broadcast_to(sample.maps[:, :1], sample.maps.shape)
        sample = replace(sample, maps=np.ascontiguousarray(upright))
    record = measured(sample, NOMINAL, SHOTS, {"depth_um": 1.1})
    found = standoff_from_record(noisy(record, spread(record) / 2, 0))["depth_um"]
    assert abs(found.value - 1.1) < 3 * found.standard_error + 0.05, found


def test_a_delay_is_told_from_a_scale():
    truth = {"nuclear_matrix_xx": 1.02, "nuclear_delay_x_us": 60.0}
    record = measured(SAMPLE, apparatus(strength=500.0), FLAT, truth)
    fit = geometry_from_sample(
        noisy(record, spread(record) / 3, 0), SAMPLE, [*truth, "nuclear_delay_y_us"]
    )
    for name, value in truth.items():
        assert abs(fit[name].value - value) < 4 * fit[name].standard_error, str(fit)
    assert abs(fit["nuclear_delay_y_us"].value) < 4 * fit["nuclear_delay_y_us"].standard_error


def test_camera_rotation_is_what_both_gradients_share():
    """A camera turned by 2° and magnified by 0.97 turns and scales both matrices."""
    turn = Rotation.from_euler("z", 2.0, degrees=True).as_matrix()[:2, :2] / 0.97
    entries = {f"{r}{c}": turn[i, j] for i, r in enumerate("xy") for j, c in enumerate("xy")}
    truth = {
        f"{whose}_matrix_{k}": v for whose in ("nuclear", "sensor") for k, v in entries.items()
    }
    record = measured(SAMPLE, NOMINAL, SHOTS, truth)
    fit = gradients_from_record(noisy(record, spread(record), 0), LATERAL + SENSOR_MATRIX)
    told = decomposition(fit)
    rotation, size = told["camera_rotation_deg"], told["camera_magnification"]
    assert abs(rotation.value - 2.0) < 4 * rotation.standard_error + 0.02
    assert abs(size.value - 0.97) < 4 * size.standard_error + 5e-4
    assert rotation.standard_error < 0.2
    assert size.standard_error < 0.005
    assert abs(told["nuclear_shear"].value) < 4 * told["nuclear_shear"].standard_error + 5e-4
    assert "common error" in told.lines[0]


def test_what_the_record_cannot_tell_is_named():
    record = measured(SAMPLE, NOMINAL, FLAT, {"depth_um": 1.1})
    record = noisy(record, spread(record) / 0.5, 0)
    no_axial = geometry_from_record(
        record, [*LATERAL, "nuclear_matrix_xz", "depth_um"], shots=np.arange(10)
    )
    assert not no_axial["nuclear_matrix_xz"].known
    assert no_axial["nuclear_matrix_xz"].value == 0
    assert no_axial["nuclear_matrix_xx"].known
    assert no_axial["depth_um"].known
    assert no_axial.undetermined == ("the record cannot tell nuclear_matrix_xz; state it",)
    thin = noisy(record, spread(record) * 20, 0)
    together = geometry_from_sample(thin, SAMPLE, LAYER + SIGNAL, shots=np.arange(4))
    assert not together["depth_um"].known
    assert any("depth_um" in one and "apart" in one for one in together.undetermined)
    with pytest.raises(InputError, match="no quantity 'depth'"):
        standoff_from_record(record, ["depth"])


def test_axial_gradients_follow_from_the_evidence():
    truth = {"nuclear_matrix_zz": 1.06, "nuclear_matrix_xz": 0.02}
    strong = table(shots=24, axial_bound_rad_per_um=0.5)
    record = measured(SAMPLE, NOMINAL, strong, truth)
    fit = standoff_from_record(noisy(record, spread(record), 0), list(truth))
    for name, value in truth.items():
        assert abs(fit[name].value - value) < 3 * fit[name].standard_error + 0.003, str(fit)
    assert fit["nuclear_matrix_xz"].standard_error < 0.01


def test_stated_values_stay():
    record = measured(SAMPLE, NOMINAL, FLAT, {"depth_um": 1.1, "signal_scale": 1.2})
    stated = [Estimate("signal_scale", "1", 1.2, fixed=True)]
    fit = geometry_from_sample(
        noisy(record, spread(record), 0), SAMPLE, LAYER[:1] + SIGNAL, stated, shots=np.arange(8)
    )
    assert fit["signal_scale"] == Estimate("signal_scale", "1", 1.2, 0.0, True)
    assert [one.name for one in fit.estimates] == ["depth_um", "signal_phase_deg", "signal_scale"]
    assert abs(fit["depth_um"].value - 1.1) < 4 * fit["depth_um"].standard_error


def test_a_wrong_model_shows_in_the_misfit():
    """Gradients that are off but not calibrated leave a residual above the noise."""
    record = measured(SAMPLE, NOMINAL, FLAT, MATRIX)
    with pytest.warns(InputWarning, match="misfit"):
        fit = geometry_from_sample(noisy(record, spread(record) / 4, 0), SAMPLE, LAYER[:1] + SIGNAL)
    assert fit.misfit > 1.5


def test_estimates_are_carried_into_the_descriptions():
    estimates = [
        Estimate("depth_um", "um", 1.3, 0.1),
        Estimate("bias_tilt_1_deg", "deg", 5.0, 0.1),
        Estimate("nuclear_matrix_xy", "1", 0.1, 0.01),
        Estimate("nuclear_delay_x_us", "us", 30.0, 1.0),
        Estimate("sensor_matrix_yy", "1", 0.9, 0.01),
    ]
    instrument, protocol = with_geometry(NOMINAL, SHOTS, estimates)
    assert instrument.depth == pytest.approx(1.3e-6)
    assert instrument.thickness == NOMINAL.thickness
    turned = np.degrees(np.arccos(instrument.bias_direction @ NOMINAL.bias_direction))
    assert turned == pytest.approx(5.0)
    # by hand: γ/2π of the proton is 42.577 MHz/T, the gradient 100 T/m
    lost = 2 * np.pi * 42.577e6 * 100.0 * 30e-6
    k = SHOTS.nuclear_wavevector
    shorter = np.sign(k[:, 0]) * np.maximum(np.abs(k[:, 0]) - lost, 0)
    np.testing.assert_allclose(
        protocol.nuclear_wavevector[:, 0], shorter + 0.1 * k[:, 1], atol=1e-4 * lost
    )
    np.testing.assert_allclose(
        protocol.sensor_wavevector[:, 1], 0.9 * SHOTS.sensor_wavevector[:, 1]
    )


def test_a_tilt_through_z_does_not_turn_the_signal():
    """Field and signal phase change little with a small tilt, whatever frame e1 belongs to."""
    upright = NOMINAL.model_copy(update={"bias_field_mT": (0.0, 0.0, 50.0)})
    sides = []
    for tilt in (-0.1, 0.1):
        estimates = [Estimate("bias_tilt_2_deg", "deg", tilt, 0.01)]
        instrument, protocol = with_geometry(upright, SHOTS, estimates)
        direction = magnetisation_direction(instrument.bias_direction)
        sides.append(protocol.amplitude[0] * direction)
    np.testing.assert_allclose(sides[0], sides[1], atol=0.01)


def test_mistakes_are_one_line():
    record = measured(SAMPLE, NOMINAL, FLAT, {})
    sample = replace(SAMPLE, maps=None)
    assert "no maps" in line(record, sample, of=geometry_from_sample)
    assert "not told this way" in line(record, ["signal_scale"], of=standoff_from_record)
    assert "no lateral gradient's" in line(record, ["depth_um"], of=gradients_from_record)
    assert "twice" in line(record, ["depth_um", "depth_um"], of=standoff_from_record)
    nothing = [Estimate("depth_um", "um", 1.0, fixed=True)]
    assert "nothing is left" in line(record, LAYER[:1], nothing, of=standoff_from_record)
    wrong = [Estimate("depth_um", "um", -1.0, 0.1)]
    assert "makes no sense" in line(NOMINAL, FLAT, wrong, of=with_geometry)
    assert "did you mean" in line(
        NOMINAL, FLAT, [Estimate("depht_um", "um", 1.0)], of=with_geometry
    )
    assert "not finite" in line("depth_um", "um", np.nan, of=Estimate)
    assert "stated" in line("depth_um", "um", 1.0, 0.1, True, of=Estimate)
    several = replace(FLAT, evolution_time=np.arange(len(FLAT)) * 1e-3)
    assert "evolution times" in line(replace(record, protocol=several), of=standoff_from_record)
    assert "shots to use" in line(
        record, of=lambda r: geometry_from_sample(r, SAMPLE, shots=np.array([99]))
    )


def test_bias_tilts_with_the_standoff():
    truth = {"depth_um": 0.9, "bias_tilt_1_deg": 3.0, "bias_tilt_2_deg": -2.0}
    record = measured(SAMPLE, NOMINAL, FLAT, truth)
    fit = geometry_from_sample(
        noisy(record, spread(record) / 2, 0), SAMPLE, LAYER[:1] + BIAS + SIGNAL
    )
    for name, value in truth.items():
        assert abs(fit[name].value - value) < 4 * fit[name].standard_error, str(fit)
