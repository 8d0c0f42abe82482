"""First-order falls of the criterion for every candidate at once.

With B = Lᴴ M⁻¹ V M⁻¹ L of a candidate's evolution time, the fall is, to first order,

    w Σ_κ' Σ_o h(κ')ᵀ B_o(κ') conj h(κ' + o),   h(κ') = f(κ' + k) F(κ'),

o running over the frequencies that alias onto κ'. For all k at once that is a correlation of
products of the kind's field f with B, one per unwrapped offset o; −o is the conjugate of o.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from recon.planning.information import Information

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
IntArray = NDArray[np.integer]

Offset = tuple[int, int]

BATCH = 32


class Scores:
    """Correlates; holds the spectra of the fields' products."""

    def __init__(self, information: Information) -> None:
        self.responses = information.responses
        self.candidates = information.responses.candidates
        _, ny, nx = self.candidates.grid.shape
        blocks, aliases = information.cosets.members.shape
        self._aliases = aliases
        self._alias = np.empty(ny * nx, int)
        self._block = np.empty(ny * nx, int)
        for flat in (information.cosets.opposite, information.cosets.members):
            self._alias[flat] = np.arange(aliases)
            self._block[flat] = np.arange(blocks)[:, None]
        self._turned = np.ones(ny * nx, int)
        self._turned[information.cosets.members] = 0
        self._offsets = list(self._half_offsets())
        self._products: list[ComplexArray] = []
        if not self.responses.one_detector:
            for field in self.responses.fields:
                parts = [self._product(field, offset) for offset in self._offsets]
                spectrum = scipy.fft.fft2(np.concatenate(parts), (2 * ny, 2 * nx), workers=2)
                self._products.append(spectrum.astype(np.complex64))

    def falls(self, information: Information) -> FloatArray:
        """Approximate fall of the criterion for every candidate, (kinds, lattice)."""
        return self.against(information)(np.arange(len(self.candidates.kinds)))

    def against(self, information: Information) -> Callable[[IntArray], FloatArray]:
        """The same for some kinds only, (those kinds, lattice), with the work they share done."""
        slope, spectra = information.slope(), information.spectra
        kinds = self.candidates.kinds
        places = np.array([spectra.place(kind.evolution_s) for kind in kinds])
        gain = 0.5 * self.responses.weight * information.share
        seen: dict[int, ComplexArray] = {}

        def prepared(place: int) -> ComplexArray:
            if place not in seen:
                blocks = self._contracted(slope, spectra.factors[place])
                one = self.responses.one_detector
                seen[place] = blocks if one else self._weight_spectrum(blocks)
            return seen[place]

        def of(some: IntArray) -> FloatArray:
            found = np.empty((len(some), self.candidates.allowed.shape[1]))
            part = self._detector if self.responses.one_detector else self._camera
            for place in np.unique(places[some]):
                rows = np.flatnonzero(places[some] == place)
                fields = self.responses.field_of_kind[some[rows]]
                found[rows] = part(prepared(int(place)), fields)
            found *= gain * self.candidates.gain[some]
            return np.where(self.candidates.allowed[some], found, -np.inf)

        return of

    def _contracted(self, slope: ComplexArray, factor: ComplexArray) -> ComplexArray:
        """Lᴴ B L and Lᴴ conj(B) L over modes, (2, blocks, aliases, nz, aliases, nz).

        The second belongs to the mirror images of the blocks.
        """
        components, nz = factor.shape[1], self.candidates.grid.shape[0]
        rest = slope.shape[-1] // components
        split = slope.reshape(*slope.shape[:2], components, rest, components, rest)
        gram = np.einsum("rcp,rdp->rcd", factor.conj(), factor)
        if components == 1:
            here = np.tensordot(gram[:, 0, 0].real, slope, 1)
            small = [here, here.conj()]
        else:
            small = [
                np.einsum("rcd,rkcadb->kab", gram, split, optimize=True),
                np.einsum("rcd,rkcadb->kab", gram, split.conj(), optimize=True),
            ]
        return np.stack(small).reshape(2, -1, self._aliases, nz, self._aliases, nz)

    def _half_offsets(self) -> list[Offset]:
        """Unwrapped offsets between frequencies that alias, one of each pair ±o."""
        _, ny, nx = self.candidates.grid.shape
        steps = [
            np.arange(1 - count, count) * (size // count)
            for count, size in zip(self.responses.aliases, (ny, nx), strict=True)
        ]
        every = [(int(y), int(x)) for y in steps[0] for x in steps[1]]
        return [offset for offset in every if offset >= (0, 0)]

    def _product(self, field: ComplexArray, offset: Offset) -> ComplexArray:
        """f_z(κ_f) conj f_z'(κ_f + o), (pairs, ny, nx), where both lie in the band."""
        nz, ny, nx = field.shape
        moved = np.zeros_like(field)
        (to_y, from_y), (to_x, from_x) = (
            _overlap(o, n) for o, n in zip(offset, (ny, nx), strict=True)
        )
        moved[:, to_y, to_x] = field[:, from_y, from_x]
        rows, columns, twice = _entries(nz, offset)
        return (field[rows] * moved[columns].conj()) * twice[:, None, None]

    def _weight_spectrum(self, seen: ComplexArray) -> ComplexArray:
        """Spectrum of the weights at −κ', over which the correlation runs."""
        parts = np.concatenate([self._weights(seen, offset) for offset in self._offsets])
        return np.asarray(scipy.fft.fft2(parts.conj(), workers=2).conj())

    def _camera(self, spectrum: ComplexArray, fields: IntArray) -> FloatArray:
        _, ny, nx = self.candidates.grid.shape
        rows = (self.candidates.steps[:, 0] + ny // 2 - ny) % (2 * ny)
        columns = (self.candidates.steps[:, 1] + nx // 2 - nx) % (2 * nx)
        falls = np.empty((len(fields), len(rows)))
        for first in range(0, len(fields), BATCH):
            some = fields[first : first + BATCH]
            total = [_dot(self._products[field], spectrum) for field in some]
            lags = scipy.fft.ifft2(np.stack(total), workers=2, overwrite_x=True)
            falls[first : first + BATCH] = lags.real[:, rows, columns]
        return falls

    def _weights(self, seen: ComplexArray, offset: Offset) -> ComplexArray:
        """F(κ') F(κ' + o) B_o(κ') over unwrapped frequencies, (pairs, 2 ny, 2 nx), complex64."""
        nz, ny, nx = self.candidates.grid.shape
        flat = np.arange(ny * nx).reshape(ny, nx)
        other = np.roll(flat, (-offset[0], -offset[1]), axis=(0, 1)).ravel()
        rows, columns, _ = _entries(nz, offset)
        turned, block, alias, of_other = (
            i[:, None] for i in (self._turned, self._block, self._alias, self._alias[other])
        )
        small = seen[turned, block, alias, rows, of_other, columns]
        tall = np.tile(small.T.reshape(-1, ny, nx), (1, 2, 2)).astype(np.complex64)
        moved = np.zeros_like(self.responses.footprint)
        (to_y, from_y), (to_x, from_x) = (
            _overlap(o, 2 * n) for o, n in zip(offset, (ny, nx), strict=True)
        )
        moved[to_y, to_x] = self.responses.footprint[from_y, from_x]
        tall *= self.responses.footprint * moved
        return tall

    def _detector(self, seen: ComplexArray, fields: IntArray) -> FloatArray:
        _, ny, nx = self.candidates.grid.shape
        steps = self.candidates.steps
        falls = np.empty((len(fields), len(steps)))
        for number, place in enumerate(fields):
            field = self.responses.fields[place]
            row, column = (int(i[0]) for i in np.nonzero(np.abs(field).sum(axis=0)))
            y = row - ny // 2 - steps[:, 0]
            x = column - nx // 2 - steps[:, 1]
            flat = (y % ny) * nx + x % nx
            blocks = seen[self._turned[flat], self._block[flat], 0, :, 0]
            h = field[:, row, column]
            curved = np.einsum("a,kab,b->k", h, blocks, h.conj()).real
            falls[number] = curved * self.responses.footprint[y + ny, x + nx] ** 2
        return falls


def _dot(left: ComplexArray, right: ComplexArray) -> ComplexArray:
    """Sum over the first axis of the product; plane by plane, which stays in the cache."""
    total, part = left[0] * right[0], np.empty_like(left[0])
    for one, other in zip(left[1:], right[1:], strict=True):
        np.multiply(one, other, out=part)
        total += part
    return total


def _entries(nz: int, offset: Offset) -> tuple[NDArray[np.intp], NDArray[np.intp], FloatArray]:
    """Rows and columns of the planes to correlate, and how often each counts."""
    if offset == (0, 0):
        rows, columns = np.triu_indices(nz)
        return rows, columns, np.where(rows == columns, 1, 2).astype(np.float32)
    rows, columns = (i.ravel() for i in np.indices((nz, nz)))
    return rows, columns, np.full(len(rows), 2, np.float32)


def _overlap(offset: int, size: int) -> tuple[slice, slice]:
    """Where i and i + offset both lie in range(size)."""
    low, high = max(0, -offset), size - max(0, offset)
    return slice(low, high), slice(low + offset, high + offset)
