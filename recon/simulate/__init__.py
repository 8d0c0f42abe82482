"""Specimen + instrument + protocol → record, by a model that is finer than the grid.

The dipole formula is summed in real space (`recon.physics.real_space`) over the specimen's fine
voxels, taken as uniformly filled and wound by the gradient inside each. Convolutions are
zero-padded, so nothing wraps; the sensor layer goes on beyond the view, so light from its
surroundings blurs in. Photons are counted. Nothing is shared with the forward operator but the
descriptions and the optical transfer function.

Approximations: the amplitude of a shot is the protocol's own (no T1); molecules stand still unless
`SimulationOptions.spreading` says what diffusion does; the light is
point-sampled at fine voxels, each sample standing for its voxel's mean up to frequencies that
the fine voxels resolve.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from recon.basis import sampled_course
from recon.errors import InputError, InputWarning
from recon.instrument import Instrument, Readout
from recon.physics import photons
from recon.protocol import Protocol
from recon.record import Record, RecordWriter, samples_shape
from recon.simulate.diffusing import diffusing_fields
from recon.simulate.images import Progress, Samples, species_images
from recon.simulate.noise import NoNoise, PhotonNoise, PoissonNoise
from recon.simulate.scene import Scene
from recon.simulate.shifted import shifted_fields
from recon.specimen import Specimen
from recon.spreading import Spreading

__all__ = ["NoNoise", "PhotonNoise", "PoissonNoise", "SimulationOptions", "simulate", "true_fields"]

LINEAR_PHASE = 0.3
"""Sensor phase, rad, beyond which the small-signal reading is off by more than 1.5 %."""


@dataclass(frozen=True)
class SimulationOptions:
    """How finely and with what flaws to simulate.

    Attributes
    ----------
    lateral_refinement, axial_refinement
        Factors on top of the specimen's own refinement; they refine the light's sampling and the
        sums over the specimen, not its structure.
    wavevector_jitter
        Standard deviation of the relative error of every wavevector component; the protocol in
        the record keeps the nominal ones.
    photon_noise
        `PoissonNoise()` or `NoNoise()`.
    memory_limit_gib
        The simulation is refused if it would need more.
    spreading
        What diffusion does to wound patterns, `FreeDiffusion()` or `StandingMap()`; None for
        molecules that stand still. Every sample time is then a convolution of its own.
    field_shift_Hz
        Shift of all lines by a static field, (nz, ny, nx) on the specimen's grid, positive towards
        higher ppm; None for none. Again a convolution per sample time.
    """

    lateral_refinement: int = 1
    axial_refinement: int = 1
    wavevector_jitter: float = 0.0
    photon_noise: PhotonNoise = field(default_factory=PoissonNoise)
    memory_limit_gib: float = 4.0
    spreading: Spreading | None = None
    field_shift_Hz: NDArray[np.floating] | None = None  # noqa: N815

    def __post_init__(self) -> None:
        if min(self.lateral_refinement, self.axial_refinement) < 1:
            raise InputError("refinements must be at least 1", "simulation")
        if not 0 <= self.wavevector_jitter < np.inf:
            raise InputError("wavevector_jitter must not be negative", "simulation")
        if self.spreading is not None and self.field_shift_Hz is not None:
            raise InputError(
                "a field shift with diffusion is not modelled", "simulation", "choose one"
            )


def simulate(
    specimen: Specimen,
    instrument: Instrument,
    protocol: Protocol,
    *,
    options: SimulationOptions | None = None,
    seed: int = 0,
    progress: Progress | None = None,
    path: Path | str | None = None,
) -> Record:
    """Measure a specimen: y_j(t) = a_j Σ_s φ_s(t) · detector(exp(i q_j·ρ) field(M_s exp(i k_j·r))).

    φ_s(t) = exp(−i 2π (δ_s − δ_ref)·1e-6·f t − t/T2*_s) with f the Larmor frequency.

    Parameters
    ----------
    seed
        Of jitter and photon noise; the noise of a shot depends on the seed and its number alone.
    progress
        Called as progress(shots done, shots).
    path
        Where to write the record; in memory if None.

    Returns
    -------
    The record. Its noise_sd is the instrument's at one average, also without photon noise.

    Raises
    ------
    InputError
        The specimen has no maps or does not span the view, a wavevector is beyond the gradient
        limits, the memory limit would be passed, or the record cannot be written.
    """
    options = options or SimulationOptions()
    protocol.check_reach(instrument)
    scene = Scene.build(
        specimen,
        instrument,
        protocol,
        (options.axial_refinement, options.lateral_refinement),
        options.wavevector_jitter,
        seed,
    )
    _check_memory(scene, options, in_file=path is not None)
    fields, strongest = _true_fields(scene, specimen, options, progress)
    if isinstance(options.photon_noise, PoissonNoise):
        _warn_if_not_linear(strongest, instrument.readout)
    description = specimen.description_json()
    measured = _measure(fields, instrument, protocol, options.photon_noise, seed)
    noise_sd = instrument.field_noise
    if path is None:
        samples = np.empty(samples_shape(instrument, protocol), np.complex64)
        for shot, of_shot in enumerate(measured):
            samples[shot] = of_shot
        return Record.from_arrays(instrument, protocol, samples, description, noise_sd=noise_sd)
    with RecordWriter(path, instrument, protocol, description, noise_sd) as writer:
        for of_shot in measured:
            writer.append(of_shot[None])
    return Record.open(path)


def true_fields(
    specimen: Specimen,
    instrument: Instrument,
    protocol: Protocol,
    *,
    options: SimulationOptions | None = None,
    seed: int = 0,
    progress: Progress | None = None,
) -> Iterator[Samples]:
    """The field (times, channels y, channels x) of one shot after the other, tesla, as `simulate`.

    Raises
    ------
    InputError
        As `simulate`.
    """
    options = options or SimulationOptions()
    protocol.check_reach(instrument)
    refinement = (options.axial_refinement, options.lateral_refinement)
    scene = Scene.build(specimen, instrument, protocol, refinement, options.wavevector_jitter, seed)
    _check_memory(scene, options, in_file=True)
    fields, strongest = _true_fields(scene, specimen, options, progress)
    _warn_if_not_linear(strongest, instrument.readout)
    return fields


def _true_fields(
    scene: Scene, specimen: Specimen, options: SimulationOptions, progress: Progress | None
) -> tuple[Iterator[Samples], float]:
    """Field (times, cy, cx) of one shot after the other, and the strongest there can be, T."""
    courses = _time_courses(specimen, scene.instrument, scene.protocol)
    if options.field_shift_Hz is not None:
        fields = shifted_fields(scene, courses, options.field_shift_Hz, progress)
        return iter(fields), float(np.abs(fields).max())
    if options.spreading is None:
        images = species_images(scene, progress)
        return _still(images, courses, scene.protocol), float(np.abs(images).sum(axis=1).max())
    diffusion = np.array([one.diffusion for one in specimen.species])
    fields = diffusing_fields(scene, courses, diffusion, options.spreading, progress)
    return iter(fields), float(np.abs(fields).max())


def _time_courses(
    specimen: Specimen, instrument: Instrument, protocol: Protocol
) -> NDArray[np.complex64]:
    """φ_s(t) of each evolution time, (evolutions, times, species)."""
    courses = [
        [sampled_course(one, instrument, protocol, float(t)) for one in specimen.species]
        for t in protocol.evolutions[0]
    ]
    return np.asarray(courses).transpose(0, 2, 1).astype(np.complex64)


def _still(
    images: Samples, courses: NDArray[np.complex64], protocol: Protocol
) -> Iterator[Samples]:
    """True field (times, cy, cx) of one shot after the other, patterns standing still."""
    for image, group in zip(images, protocol.evolutions[1], strict=True):
        yield np.tensordot(courses[group], image, 1)


def _measure(
    fields: Iterator[Samples],
    instrument: Instrument,
    protocol: Protocol,
    noise: PhotonNoise,
    seed: int,
) -> Iterator[Samples]:
    """Samples (times, cy, cx) of one shot after the other."""
    for shot, true in enumerate(fields):
        generator = np.random.default_rng([seed, shot])
        yield noise.samples(true, instrument.readout, int(protocol.averages[shot]), generator)


def _warn_if_not_linear(field: float, readout: Readout) -> None:
    """Say so if the field, T, turns the sensor spins beyond their linear range."""
    phase = field * photons.phase_per_field(readout.sensing_time, readout.efficiency)
    if phase > LINEAR_PHASE:
        warnings.warn(
            f"the field turns the sensor by up to {phase:.2g} rad, beyond its linear range of "
            f"{LINEAR_PHASE} rad; choose a shorter sensing_time_us or a lower polarisation",
            InputWarning,
            stacklevel=3,
        )


def _check_memory(scene: Scene, options: SimulationOptions, *, in_file: bool) -> None:
    """Refuse, before anything large is taken, what would pass the memory limit."""
    plane = 8 * int(np.prod(scene.padded))
    species, shots = len(scene.magnetisation), len(scene.protocol)
    nodes = max(
        sum(voxels.node_total(scene.sheet(axis), largest) for voxels, _ in scene.layers())
        for axis, _, largest in scene.axes()
    )
    channels = int(np.prod(scene.instrument.detector.channels()))
    held = species + (0 if in_file else len(scene.protocol.sample_times))
    need = plane * (nodes + 12 + 5 * species) + 8 * shots * channels * held
    if options.spreading is not None or options.field_shift_Hz is not None:
        layers, times = len(scene.grid.heights), len(scene.protocol.sample_times)
        need += 3 * plane * layers * (1 + species) + 8 * shots * channels * times
    limit = options.memory_limit_gib * 2**30
    if need > limit:
        raise InputError(
            f"needs {need / 2**30:.1f} GiB, the limit is {limit / 2**30:.1f} GiB",
            "simulation",
            "refine less, write the record to a file, or raise memory_limit_gib",
        )
