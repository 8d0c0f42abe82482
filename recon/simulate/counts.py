"""Photon counts of every frame, with everything that goes wrong: input to the conversion's tests.

With l the laser's course, v and C the channel's light and contrast, the frames of one row are

    signal    ~ Poisson(N l v [1 − (C/2)(1 − sin φ)] + pickup + dark) + read noise
    reference ~ Poisson(N l v + dark) + read noise,      φ = 2π γ_e τ η b(t)
    b(t) = Re[(B(t) e^{−i 2π ν t} a + B_common) e^{−i(2π f₀ t + jitter + phase)}] + tone

in counts, rounded and clipped. The fields B come from the same direct sums as `simulate`'s.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from recon.counts.acquisition import Acquisition
from recon.counts.record import COUNT_TYPES, CountsRecord
from recon.counts.writer import CountsWriter
from recon.instrument import Instrument
from recon.physics.photons import phase_per_field
from recon.protocol import Protocol
from recon.simulate import SimulationOptions, true_fields
from recon.simulate.images import Progress
from recon.simulate.imperfections import ChannelFlaws, Imperfections
from recon.specimen import Specimen

FloatArray = NDArray[np.float32]


@dataclass(frozen=True, eq=False)
class Truth:
    """What the imperfections really were.

    `frequency_Hz`, `jitter_rad`, `light`, `polarisation` have one entry per row; `channels` are
    the maps.
    """

    channels: ChannelFlaws
    frequency_Hz: NDArray[np.float64]  # noqa: N815
    jitter_rad: NDArray[np.float64]
    light: NDArray[np.float64]
    polarisation: NDArray[np.float64]


def simulate_counts(
    specimen: Specimen,
    instrument: Instrument,
    protocol: Protocol,
    acquisition: Acquisition,
    path: Path | str,
    *,
    flaws: Imperfections | None = None,
    seed: int = 0,
    options: SimulationOptions | None = None,
    compression: int | None = 1,
    progress: Progress | None = None,
) -> tuple[CountsRecord, Truth]:
    """Measure a specimen into a file of counts; every shot once per average.

    Raises
    ------
    InputError
        As `simulate`; the acquisition does not fit; the file cannot be written.
    """
    flaws = flaws or Imperfections()
    acquisition.check(instrument, protocol)
    frames = acquisition.frame_times(protocol)
    every = replace(protocol, sample_times=frames.ravel(), sample_duration=0.0)
    fields = true_fields(specimen, instrument, every, options=options, seed=seed, progress=progress)
    order = np.repeat(np.arange(len(protocol)), protocol.averages)
    camera = _Camera.build(instrument, protocol, acquisition, flaws, len(order), seed)
    high = acquisition.full_scale_count > np.iinfo(np.uint16).max
    writer = CountsWriter(
        path,
        instrument,
        protocol,
        acquisition,
        specimen.description_json(),
        dtype=COUNT_TYPES[int(high)],
        compression=compression,
    )
    interval = np.median(np.diff(protocol.clock_time)) if len(protocol) > 1 else 1.0
    with writer:
        row = 0
        for shot, field in enumerate(fields):
            for average in range(int(protocol.averages[shot])):
                clock = protocol.clock_time[shot] + average * interval
                writer.append(shot, float(clock), *camera.frames(row, shot, field))
                row += 1
    return CountsRecord.open(path), camera.truth


@dataclass(frozen=True, eq=False)
class _Camera:
    """Turns true fields into counts."""

    instrument: Instrument
    acquisition: Acquisition
    flaws: Imperfections
    truth: Truth
    times: NDArray[np.float64]
    carrier: NDArray[np.float64]
    evolution: NDArray[np.float64]
    seed: int

    @classmethod
    def build(
        cls,
        instrument: Instrument,
        protocol: Protocol,
        acquisition: Acquisition,
        flaws: Imperfections,
        rows: int,
        seed: int,
    ) -> _Camera:
        random = np.random.default_rng([seed, rows, 2])
        channels = ChannelFlaws.draw(flaws, instrument.detector.channels(), random)
        share = np.arange(rows) / max(rows - 1, 1)
        walk = flaws.field_walk_Hz * random.standard_normal(rows)
        truth = Truth(
            channels,
            np.array([flaws.field(s) for s in share]) + walk,
            flaws.timing_jitter_rad * random.standard_normal(rows),
            np.array([flaws.light(s) for s in share]),
            np.array([flaws.polarisation(s) for s in share]),
        )
        times = acquisition.frame_times(protocol).ravel()
        angles = acquisition.frame_angles(instrument, protocol).ravel()
        return cls(
            instrument, acquisition, flaws, truth, times, angles, protocol.evolution_time, seed
        )

    def frames(
        self, row: int, shot: int, field: NDArray[np.complex64]
    ) -> tuple[NDArray[np.unsignedinteger], NDArray[np.unsignedinteger]]:
        """Signal and reference counts of one row from its true field (frames, y, x)."""
        random = np.random.default_rng([self.seed, row, 3])
        readout = self.instrument.readout
        contrast = readout.contrast * self.truth.channels.contrast
        seen = self._field(row, shot, field, random)
        slope = np.float32(phase_per_field(readout.sensing_time, readout.efficiency))
        bright = 1 - contrast / 2 * (1 - np.sin(slope * seen))
        photons = readout.photons_per_readout * self.acquisition.readouts_per_frame(self.instrument)
        light = np.float32(photons * self.truth.light[row]) * self.truth.channels.light
        laser = 1 + self.flaws.laser_noise * random.standard_normal(len(field))
        lit = light * laser.astype(np.float32)[:, None, None]
        picked = np.float32(photons) * self._pickup(row)[:, None, None]
        dark = np.float32(photons) * self.truth.channels.dark
        signal, reference = lit * bright + picked + dark, lit + dark
        return self._counted(signal, random), self._counted(reference, random)

    def _field(
        self, row: int, shot: int, field: NDArray[np.complex64], random: np.random.Generator
    ) -> FloatArray:
        """Real field along the sensing axis, (frames, y, x), tesla."""
        truth, carrier = self.truth, self.carrier
        turns = self.acquisition.carrier(self.instrument) * self.evolution[shot]
        start = carrier + 2 * np.pi * (turns % 1) + truth.jitter_rad[row]
        drift = 2 * np.pi * truth.frequency_Hz[row] * (self.times + self.evolution[shot])
        wave = truth.polarisation[row] * np.exp(-1j * (start + drift))
        b = field * wave.astype(np.complex64)[:, None, None]
        tone = self.acquisition.tone
        if tone is not None:
            offset = 2 * np.pi * tone.offset_Hz * self.times
            played = tone.amplitude * np.exp(-1j * (carrier + truth.jitter_rad[row] + offset))
            b += played.astype(np.complex64)[:, None, None]
        if self.flaws.common_field_noise:
            frame_noise = self.instrument.field_noise * np.sqrt(
                self.acquisition.frames_per_window / 4
            )
            size = self.flaws.common_field_noise * frame_noise
            shared = size * random.standard_normal(len(b))
            b += shared.astype(np.float32)[:, None, None]
        b *= np.exp(-1j * truth.channels.phase).astype(np.complex64)
        return np.asarray(b.real)

    def _pickup(self, row: int) -> FloatArray:
        """Mains pickup relative to the light, (frames,); its phase goes on between rows."""
        acquisition, total = self.acquisition, np.zeros(len(self.times))
        if not (self.flaws.pickup and acquisition.mains_Hz):
            return total.astype(np.float32)
        random = np.random.default_rng([self.seed, row, 4])
        phase = random.uniform(0, 2 * np.pi)
        mains = acquisition.mains_Hz + self.flaws.mains_offset_Hz
        for h in acquisition.mains_harmonics:
            total += self.flaws.pickup / h * np.cos(h * (2 * np.pi * mains * self.times + phase))
        return total.astype(np.float32)

    def _counted(
        self, photons: FloatArray, random: np.random.Generator
    ) -> NDArray[np.unsignedinteger]:
        """Counts of mean photons: shot noise, read noise, dead and full channels, rounding."""
        acquisition, channels = self.acquisition, self.truth.channels
        if float(photons.max(initial=0)) > 1e4:
            noisy = random.standard_normal(photons.shape, np.float32)
            noisy *= np.sqrt(photons + np.float32(acquisition.read_noise_photons**2))
            noisy += photons
        else:
            noisy = random.poisson(photons).astype(np.float32)
            noisy += np.float32(acquisition.read_noise_photons) * random.standard_normal(
                photons.shape, np.float32
            )
        noisy[:, channels.dead] = 0
        noisy /= np.float32(acquisition.photons_per_count)
        noisy += np.float32(acquisition.count_offset + 0.5)
        full = acquisition.full_scale_count
        noisy[:, channels.saturated] = full
        kind = COUNT_TYPES[int(full > np.iinfo(np.uint16).max)]
        return np.clip(np.floor(noisy), 0, full).astype(kind)
