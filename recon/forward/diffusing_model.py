"""Shots at times of their own, of species whose wound patterns diffuse away: the responses.

At the time t of a shot wound by k (k_z along z), species s at layer z of the slab is seen through

    R_s(κ_f, z, t) = Φ_s(t) · L_s(κ_f, k, t) · S_a(κ_f) · A_s(κ_f, z, k_z, t),

with κ_f = κ' + k the total lateral wavevector, L what diffusion leaves of it (`recon.spreading`),
S the field of a sheet on the face and A the layer after spreading along z
(`recon.physics.diffusion.wound_layers`). Lateral wavevectors do not mix, so AᴴWA stays
block-diagonal in κ', species and layers sharing a block.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from recon.basis import species_basis
from recon.errors import InputError
from recon.forward.model import ForwardModel
from recon.forward.shot_tables import ShotTables
from recon.grid import Grid
from recon.instrument import Instrument
from recon.physics.diffusion import pulse_attenuation, wound_layers
from recon.physics.dipole import magnetisation_direction, surface_kernel
from recon.protocol import Protocol
from recon.specimen import Species
from recon.spreading import FreeDiffusion, Spreading

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

KEPT_BYTES = 1 << 28
"""Responses and layers kept for shots to come."""


@dataclass(frozen=True, eq=False)
class DiffusingModel:
    """What the operator needs beyond `ForwardModel`.

    Attributes
    ----------
    base
        Grid, encoding, detector; its own basis is not used.
    bases
        Φ of each evolution time, (evolutions, times, components), A/m per unit.
    wound_times
        How long patterns have been wound at each sample, (evolutions, times), s.
    group
        Which evolution time each shot has, (shots,).
    diffusion
        D of each component, (components,), m²/s.
    pulse
        Length of the encoding pulse, s.
    spreading
        What diffusion does to the map.
    """

    base: ForwardModel
    bases: ComplexArray
    wound_times: FloatArray
    group: IntArray
    diffusion: FloatArray
    pulse: float = 0.0
    spreading: Spreading = field(default_factory=FreeDiffusion)

    def __post_init__(self) -> None:
        evolutions, times, components = self.bases.shape
        fits = self.wound_times.shape == (evolutions, times)
        if not fits or np.shape(self.diffusion) != (components,):
            raise InputError("bases, wound times and diffusion differ in shape", "diffusing model")
        if not (np.asarray(self.diffusion) >= 0).all():
            raise InputError("diffusion must not be negative", "diffusing model")

    @classmethod
    def build(
        cls,
        grid: Grid,
        instrument: Instrument,
        protocol: Protocol,
        species: Sequence[Species],
        noise_sd: float,
        spreading: Spreading | None = None,
    ) -> DiffusingModel:
        """From descriptions; raises what `ForwardModel.build` raises."""
        evolutions, group = protocol.evolutions
        bases = [species_basis(species, instrument, protocol, float(t)) for t in evolutions]
        return cls(
            ForwardModel.build(grid, instrument, protocol, bases[0], noise_sd),
            np.stack(bases),
            np.stack([protocol.wound_times(float(t)) for t in evolutions]),
            group,
            np.array([one.diffusion for one in species]),
            protocol.encoding_duration,
            spreading or FreeDiffusion(),
        )

    def subset(self, shots: slice | IntArray) -> DiffusingModel:
        """The model of some of the shots, in the order given."""
        return replace(self, base=self.base.subset(shots), group=self.group[shots])

    @property
    def components(self) -> int:
        return int(self.bases.shape[2])

    @property
    def times(self) -> int:
        return int(self.bases.shape[1])

    @property
    def sample_count(self) -> int:
        """Number of complex samples of the whole record."""
        return len(self.group) * self.times * int(np.prod(self.base.channels))


@dataclass(frozen=True, eq=False)
class Response:
    """R of one shot: the product of a course and a kernel.

    Attributes
    ----------
    course
        (times, components); ones where the kernel holds it.
    kernel
        Detector transfer included, (1 or times, components, nz, ny, nx); 1 where all times see the
        pattern alike. (…, 1, 1) for one detector.
    """

    course: ComplexArray
    kernel: ComplexArray

    def fields(self, seen: ComplexArray) -> ComplexArray:
        """(components, nz, ny, nx) of an object's spectrum to (times, ny, nx)."""
        if len(self.kernel) > 1:
            return np.asarray(np.einsum("tczyx,czyx->tyx", self.kernel, seen))
        return np.asarray(np.tensordot(self.course, (self.kernel[0] * seen).sum(axis=1), 1))

    def back(self, fields: ComplexArray) -> ComplexArray:
        """The adjoint of `fields`."""
        if len(self.kernel) > 1:
            return np.asarray(np.einsum("tczyx,tyx->czyx", self.kernel.conj(), fields))
        mixed = np.tensordot(self.course.conj().T, fields, 1)
        return np.asarray(self.kernel[0].conj() * mixed[:, None])

    def products(self, unit: float) -> ComplexArray:
        """Σ_t conj(R_a) R_b times unit², (ny, nx, a, b), a and b running over components and z.

        Without the course where the kernel is the same at all times: see `gram`.
        """
        rows = self.kernel.reshape(len(self.kernel), -1, *self.kernel.shape[3:])
        rows = (rows * np.float32(unit)).transpose(2, 3, 0, 1)
        return np.asarray(np.matmul(rows.conj().swapaxes(-1, -2), rows))

    def gram(self) -> ComplexArray | float:
        """What `products` is to be multiplied with, (a, b), or 1."""
        if len(self.kernel) > 1:
            return 1.0
        nz = self.kernel.shape[2]
        gram = self.course.conj().T @ self.course
        return np.asarray(np.kron(gram, np.ones((nz, nz))), np.complex64)

    def whole(self) -> ComplexArray:
        """R, (times, components, nz, ny, nx)."""
        return np.asarray(self.kernel * self.course[:, :, None, None, None])


class Responses:
    """R of every shot over the band, or at the one frequency that one detector sees."""

    def __init__(self, model: DiffusingModel, dtype: np.dtype[np.complexfloating]) -> None:
        self.model, self.dtype = model, dtype
        self.tables = ShotTables(model.base, dtype)
        self._kept: dict[object, ComplexArray] = {}

    def key(self, shot: int) -> tuple[object, ...]:
        """Shots of equal key have equal kernels."""
        model, encoding = self.model, self.model.base.encoding
        apart = model.spreading.standing and self.alike(shot)
        knows = model.spreading.knows_wound(model.pulse) and not apart
        wound = tuple(encoding.nuclear[shot]) if knows else ()
        return (*self.tables.keys[shot], int(model.group[shot]), *wound)

    def of(self, shot: int) -> Response:
        """The response; the kernel is kept for shots to come."""
        model = self.model
        course = np.ones((model.times, model.components), self.dtype)
        if self.alike(shot):
            course = model.bases[model.group[shot]].astype(self.dtype)
            if model.spreading.standing:
                left = [self._left(shot, place)[:, 0, 0] for place in range(model.components)]
                course = (course * np.stack(left, axis=1)).astype(self.dtype)
        return Response(course, self._keep(self.key(shot), lambda: self._kernel(shot)))

    def alike(self, shot: int) -> bool:
        """All samples of the shot see the layers alike."""
        times = self.model.wound_times[self.model.group[shot]]
        still = self.model.spreading.standing and self.model.base.encoding.axial[shot] == 0
        return still or bool(np.all(times == times[0]))

    def _left(self, shot: int, place: int) -> FloatArray:
        """What diffusion leaves of one component's lateral wavevectors and pulse."""
        model, encoding = self.model, self.model.base.encoding
        rows, columns, _, _ = self.places(shot)
        wound = encoding.nuclear[shot] * np.array(model.base.grid.lattice_step)
        diffusion, times = float(model.diffusion[place]), model.wound_times[model.group[shot]]
        sides = self._band(rows, columns)
        left = model.spreading.lateral(sides, wound, diffusion, times, model.pulse)
        return left * pulse_attenuation(float(encoding.axial[shot]), diffusion, model.pulse)

    def _kernel(self, shot: int) -> ComplexArray:
        model, base = self.model, self.model.base
        encoding, instrument = base.encoding, base.instrument
        rows, columns, _, _ = self.places(shot)
        sheet = surface_kernel(
            *self._band(rows, columns),
            instrument.sensing_directions[encoding.sensing_axis[shot]],
            magnetisation_direction(instrument.bias_direction),
            instrument.depth,
            instrument.thickness,
        )
        if not base.is_one_detector:
            sheet = sheet * self.tables.transfer(shot)
        group, axial = int(model.group[shot]), float(encoding.axial[shot])
        parts, alike = [], self.alike(shot)
        for place, diffusion in enumerate(model.diffusion):
            layers = self._layers(rows, columns, axial, float(diffusion), group)
            course = sheet[None]
            if not (alike and model.spreading.standing):
                course = course * self._left(shot, place)
            if alike:
                course, layers = course[:1], layers[:1]
            else:
                course = course * model.bases[group, :, place, None, None]
            parts.append(course.astype(self.dtype)[:, None] * layers)
        return np.stack(parts, axis=1)

    def places(self, shot: int) -> tuple[slice, slice, slice, slice]:
        """Where a shot looks: rows, columns of the band, then of the unwrapped spectrum."""
        rows, columns = self.tables.windows[shot]
        if not self.model.base.is_one_detector:
            return slice(None), slice(None), rows, columns
        row, column = self.tables.detector_place(shot)
        top, left = rows.start + row, columns.start + column
        return (
            slice(row, row + 1),
            slice(column, column + 1),
            slice(top, top + 1),
            slice(left, left + 1),
        )

    def _band(self, rows: slice, columns: slice) -> tuple[FloatArray, FloatArray]:
        grid = self.model.base.grid
        wave_y, wave_x = (
            np.arange(-(n // 2), n - n // 2, dtype=np.float64) * s
            for n, s in zip(grid.shape[1:], grid.lattice_step, strict=True)
        )
        return wave_y[rows, None], wave_x[columns]

    def _layers(
        self, rows: slice, columns: slice, axial: float, diffusion: float, group: int
    ) -> ComplexArray:
        """A over the band, (times, nz, ny, nx); times without diffusion are worked out once."""
        grid, times = self.model.base.grid, self.model.wound_times[group]
        wave_y, wave_x = self._band(rows, columns)
        size = np.hypot(wave_y, wave_x)
        thickness = grid.shape[0] * grid.voxel[0]

        def evaluate() -> ComplexArray:
            scale = max(grid.lattice_step) * 1e-9
            _, first, place = np.unique(
                np.round(size / scale), return_index=True, return_inverse=True
            )
            spread, when = np.unique(diffusion * times, return_inverse=True)
            kappa = size.ravel()[first]
            standing = self.model.spreading.standing
            seen = wound_layers(kappa, grid.shape[0], thickness, axial, spread, standing)
            seen = seen * np.exp((1j * axial - kappa) * grid.base_height)
            return seen.astype(self.dtype)[when][..., place.reshape(size.shape)]

        return self._keep(("layers", rows.start, columns.start, axial, diffusion, group), evaluate)

    def _keep(self, key: object, evaluate) -> ComplexArray:  # type: ignore[no-untyped-def]
        if key not in self._kept:
            made = evaluate()
            while self._kept and self._size() + made.nbytes > KEPT_BYTES:
                self._kept.pop(next(iter(self._kept)))
            self._kept[key] = made
        return self._kept[key]

    def _size(self) -> int:
        return sum(kept.nbytes for kept in self._kept.values())
