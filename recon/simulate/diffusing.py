"""Wound patterns that diffuse while they are listened to, in real space on the fine grid.

Each time step is one walk from the end of the encoding: along z molecules of every fine layer step
by the nodes of a normal law and are folded back at the faces; along y and x the pattern is
convolved with the normal law, sampled finely and shared between fine voxels. During a pulse of
length δ a molecule that goes from r' to r' + u sees k·(r' + u/2) on the mean of all walks between
them, with a spread that leaves exp(−D k² δ/12) (the Brownian bridge); along z the faces are
neglected meanwhile. Nothing is shared with `recon.physics.diffusion`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.physics.real_space import VoxelResponse
from recon.simulate.images import Progress, Samples, detector
from recon.simulate.scene import Scene, Wavevectors
from recon.spreading import Spreading

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

STEPS = 2001
"""Samples of the normal law over ± 7 standard deviations."""

STARTS = 32
"""Starting heights per fine layer."""


@dataclass(frozen=True)
class Walk:
    """Diffusion of one species: D, m²/s; time since the pulse and length of the pulse, s."""

    diffusion: float
    time: float
    pulse: float
    standing: bool

    def lateral(self, wave: float, edge: float, padded: int) -> NDArray[np.complex64]:
        """Transform of the convolution along one side, in fine voxels, (padded,).

        Sum over steps u of the law times exp(i k u) for the pattern as wound; for a map that
        stands, the mean of exp(i k u) over the law, the same at every frequency.
        """
        kernel = self._law(wave, edge, padded, self.time, 0.0)
        if self.pulse:
            during = self._law(wave, edge, padded, self.pulse, 0.5)
            bridge = np.exp(-self.diffusion * self.pulse * wave**2 / 12)
            kernel = kernel * during * bridge
        return kernel.astype(np.complex64)

    def _law(
        self, wave: float, edge: float, padded: int, time: float, share: float
    ) -> ComplexArray:
        """One stage; a molecule's phase is k times its start plus `share` of its step."""
        sigma = np.sqrt(2 * self.diffusion * time)
        step = np.linspace(-7, 7, STEPS) * sigma
        weight = np.exp(-0.5 * np.linspace(-7, 7, STEPS) ** 2)
        weight = weight / weight.sum()
        if self.standing:  # what is here started a step away
            return np.full(padded, (weight * np.exp(-1j * wave * (1 - share) * step)).sum())
        turned = weight * np.exp(-1j * wave * (1 - share) * step)
        place = np.floor(step / edge).astype(int)
        beyond = step / edge - place
        kernel = np.zeros(padded, complex)
        np.add.at(kernel, place % padded, (1 - beyond) * turned)
        np.add.at(kernel, (place + 1) % padded, beyond * turned)
        # the envelope is convolved; the pattern itself is the envelope times exp(i k y)
        signed = np.arange(padded)
        signed = np.where(signed > padded // 2, signed - padded, signed)
        return scipy.fft.fft(kernel * np.exp(1j * wave * signed * edge))

    def axial(self, wave: float, count: int, edge: float) -> ComplexArray:
        """Envelope of every fine layer after the walk from each layer, (layers, layers).

        The pattern is the envelope times exp(i k_z z).
        """
        left = np.exp(-self.diffusion * self.pulse * wave**2 / 3)
        if self.diffusion * self.time == 0:
            return np.eye(count) * left
        start = (np.arange(count * STARTS) + 0.5) * (edge / STARTS)
        nodes = np.linspace(-7, 7, STEPS)
        weight = np.exp(-0.5 * nodes**2) / np.exp(-0.5 * nodes**2).sum() / STARTS
        end = start[:, None] + np.sqrt(2 * self.diffusion * self.time) * nodes
        end = end % (2 * count * edge)
        end = np.minimum(end, 2 * count * edge - end)
        arrived = np.minimum((end / edge).astype(int), count - 1)
        left_at = np.broadcast_to((np.arange(len(start)) // STARTS)[:, None], end.shape)
        matrix = np.zeros((count, count), complex)
        if self.standing:  # by symmetry of the walk: who is at `start` was wound at `end`
            turned = weight * np.exp(1j * wave * (end - start[:, None]))
            np.add.at(matrix, (left_at, left_at), turned)
        else:
            turned = weight * np.exp(1j * wave * (start[:, None] - end))
            np.add.at(matrix, (arrived, left_at), turned)
        return matrix * left


def diffusing_fields(
    scene: Scene,
    courses: NDArray[np.complex64],
    diffusion: FloatArray,
    spreading: Spreading,
    progress: Progress | None,
) -> Samples:
    """What each shot's channels see, (shots, times, cy, cx), tesla.

    Parameters
    ----------
    courses
        φ_s(t) of each evolution time, (evolutions, times, species).
    diffusion
        D of each species, m²/s.
    """
    protocol = scene.protocol
    evolutions, group = protocol.evolutions
    channels = scene.instrument.detector.channels()
    fields = np.empty((len(protocol), len(protocol.sample_times), *channels), np.complex64)
    detect = detector(scene)
    done = 0
    for axis, members, largest in scene.axes():
        sheet = scene.sheet(axis)
        layers = [(voxels.response(sheet, largest), held) for voxels, held in scene.all_layers()]
        keyed = np.column_stack([scene.nuclear[members], group[members]])
        kinds, which = np.unique(keyed, axis=0, return_inverse=True)
        for number, kind in enumerate(kinds):
            wave, evolution = kind[:3], int(kind[3])
            wound = protocol.wound_times(float(evolutions[evolution]))
            alike: dict[float, Samples] = {}
            shots = members[which.reshape(-1) == number]
            spread = _spreader(scene, layers, wave, diffusion, spreading)
            for place, time in enumerate(wound):
                if float(time) not in alike:
                    alike = {float(time): spread(float(time))}
                mixed = np.tensordot(courses[evolution, place], alike[float(time)], 1)
                for shot in shots:
                    factor = np.complex64(protocol.amplitude[shot])
                    fields[shot, place] = detect(mixed[None], scene.sensor[shot])[0] * factor
            done += len(shots)
            if progress:
                progress(done, len(protocol))
    return fields


def _spreader(
    scene: Scene,
    layers: list[tuple[VoxelResponse, NDArray[np.float32]]],
    wave: Wavevectors,
    diffusion: FloatArray,
    spreading: Spreading,
) -> Callable[[float], Samples]:
    """The function time → field of each species at the places, (species, places y, x)."""
    rows, columns = scene.padded
    wound = np.exp(1j * wave[1] * scene.y)[:, None] * np.exp(1j * wave[0] * scene.x)
    content = np.stack([held for _, held in layers], axis=1) * wound.astype(np.complex64)
    spectra = scipy.fft.fft2(content, (rows, columns), workers=2)
    responses = np.stack([response.spectrum(wave) for response, _ in layers])
    _, edge_y, edge_x = scene.grid.voxel
    (my, mx), (py, px) = scene.margin, scene.places

    def spread(time: float) -> Samples:
        total = np.empty((len(spectra), rows, columns), np.complex64)
        for place, each in enumerate(diffusion):
            walk = Walk(float(each), time, scene.protocol.encoding_duration, spreading.standing)
            mixing = walk.axial(wave[2], len(layers), scene.grid.voxel[0]).astype(np.complex64)
            seen = np.tensordot(mixing.T, responses, 1)
            total[place] = (seen * spectra[place]).sum(axis=0)
            total[place] *= walk.lateral(wave[1], edge_y, rows)[:, None]
            total[place] *= walk.lateral(wave[0], edge_x, columns)
        field = scipy.fft.ifft2(total, workers=2, overwrite_x=True)
        return np.asarray(
            field[:, np.arange(-my, py - my)[:, None] % rows, np.arange(-mx, px - mx) % columns]
        )

    return spread
