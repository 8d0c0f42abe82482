"""A static field that differs from place to place: every voxel's time course turns at its own rate.

M(r, t) = Σ_s φ_s(t) M_s(r) exp(−i 2π Δf(r) t), so that every sample time is a convolution of its
own. Nothing is shared with what corrects such shifts.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from recon.errors import InputError
from recon.simulate.images import Progress, Samples, detector, wound_field
from recon.simulate.scene import Scene

FloatArray = NDArray[np.floating]
BATCH = 8
"""Sample times that are convolved together."""


def shifted_fields(
    scene: Scene,
    courses: NDArray[np.complex64],
    shift_Hz: FloatArray,
    progress: Progress | None,
) -> Samples:
    """What each shot's channels see, (shots, times, cy, cx), tesla.

    Parameters
    ----------
    courses
        φ_s(t) of each evolution time, (evolutions, times, species).
    shift_Hz
        Δf on the specimen's grid, (nz, ny, nx).

    Raises
    ------
    InputError
        The map is not finite or does not divide the fine grid.
    """
    shift = _on_fine_grid(np.asarray(shift_Hz, float), scene.grid.shape)
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
            evolution = int(kind[3])
            times = protocol.sample_times + evolutions[evolution]
            shots = members[which.reshape(-1) == number]
            for first in range(0, len(times), BATCH):
                part = slice(first, first + BATCH)
                turned = [
                    (response, _turned(held, courses[evolution, part], times[part], layer))
                    for (response, held), layer in zip(layers, shift, strict=True)
                ]
                field = wound_field(scene, turned, kind[:3])
                for shot in shots:
                    seen = detect(field, scene.sensor[shot])
                    fields[shot, part] = seen * np.complex64(protocol.amplitude[shot])
            done += len(shots)
            if progress:
                progress(done, len(protocol))
    return fields


def _turned(
    held: NDArray[np.float32],
    courses: NDArray[np.complex64],
    times: FloatArray,
    shift: FloatArray,
) -> NDArray[np.complex64]:
    """Magnetisation of one fine layer over times, (times, ny, nx)."""
    mixed = np.tensordot(courses, held, 1)
    phase = -2 * np.pi * times[:, None, None] * shift
    return np.asarray(mixed * np.exp(1j * phase), np.complex64)


def _on_fine_grid(shift: FloatArray, fine: tuple[int, ...]) -> FloatArray:
    if shift.ndim != 3 or any(n % m for n, m in zip(fine, shift.shape, strict=True)):
        raise InputError(
            f"has shape {shift.shape}, the fine grid {fine}",
            "field shift",
            "give one value per voxel of the specimen",
        )
    if not np.isfinite(shift).all():
        raise InputError("is not finite", "field shift")
    for axis, (many, few) in enumerate(zip(fine, shift.shape, strict=True)):
        shift = np.repeat(shift, many // few, axis)
    return shift
