"""Gauss–Newton on all voxels side by side, amounts and baseline eliminated at every step.

Only the nuisances (Δf, Γ, θ) of a voxel are stepped; amounts follow from a small linear solve, so
a step is judged at the best amounts it allows (variable projection). Sources: Golub & Pereyra,
SIAM J. Numer. Anal. 10:413 (1973); Kay, Fundamentals of Statistical Signal Processing (1993).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from recon.quantify.fitted import Fitted
from recon.quantify.moments import Moments, Products
from recon.quantify.noise import VoxelNoise
from recon.quantify.nuisance import Nuisance
from recon.quantify.patterns import Baseline, Pattern
from recon.result import Cube

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
CHUNK = 256
HALVINGS = 3
TINY = 1e-9
ENOUGH = 0.05
"""Step, r.m.s. in standard errors, that ends the fit."""
BLANKS = 64
"""Voxels per plane in which the error of a blank is worked out."""


@dataclass(eq=False)
class _Chunk:
    """Some voxels and the products at their present nuisances."""

    where: slice
    products: Products
    settled: bool = False


class GaussNewton:
    """A fit under way; parameters run (V, parameters)."""

    def __init__(
        self,
        rules: tuple[Nuisance, Nuisance, Nuisance],
        baseline: Baseline,
        cube: Cube,
        patterns: Sequence[Pattern],
        noise: VoxelNoise,
    ) -> None:
        self.rules, self.shape, self.patterns = rules, cube.grid.shape, patterns
        self.noise, self.sigma = noise, noise.sigma.reshape(-1)
        self.free = [place for place, rule in enumerate(rules) if rule.free]
        courses = np.concatenate([pattern.courses for pattern in patterns], axis=1)
        self.scale = float(np.sqrt(np.mean(np.abs(courses) ** 2)))
        self.courses = np.asarray(courses / self.scale, complex)
        self.broad = baseline.courses(cube.sample_times)
        bound = rules[1].bound if rules[1].free else 0.0
        self.moments = Moments(self.courses, self.broad, cube.sample_times, bound)
        count = len(cube.sample_times)
        self.signal = np.ascontiguousarray(cube.values.reshape(count, -1).T)
        parts = [len(p.courses.T) for p in patterns]
        self.members = np.zeros((len(patterns), sum(parts)))
        self.members[np.repeat(np.arange(len(patterns)), parts), np.arange(sum(parts))] = 1
        voxels = len(self.signal)
        self.energy, self.left = np.empty(voxels), np.empty(voxels)
        self.linear = np.zeros((voxels, sum(parts) + 2 * self.broad.shape[1]))
        self.nuisance = np.zeros((voxels, 3), np.float32)
        self.nuisance_error = np.zeros((voxels, 3), np.float32)
        self.covariance = np.zeros((voxels, len(patterns), len(patterns)), np.float32)
        self._moved = np.zeros(voxels)
        self._pool = ThreadPoolExecutor(2)
        self.chunks: list[_Chunk] = []

    def run(self, iterations: int, progress: Callable[[int, int], None] | None) -> Fitted:
        """Start, sweep until nothing moves, and gather."""
        with self._pool:
            self.start()
            for step in range(iterations if self.free else 0):
                centres = self._neighbourhood()
                self._each(partial(self._step, centres=centres))
                if progress is not None:
                    progress(step + 1, iterations)
                if np.sqrt(np.mean(self._moved**2)) < ENOUGH:
                    break
            self._each(self._keep_errors)
            return self.result()

    def _each(self, work: Callable[[_Chunk], None]) -> None:
        """Chunks of voxels are independent; two threads share them."""
        list(self._pool.map(work, self.chunks))

    def start(self) -> None:
        """Shift of every voxel by a scan, then the first products and amounts."""
        parts = [slice(i, i + CHUNK) for i in range(0, len(self.signal), CHUNK)]
        if self.rules[0].free:
            shifts, pooled = self._scanned(parts)
            self.nuisance[:, 0] = shifts[np.argmax(pooled, axis=0)]

        def begin(where: slice) -> _Chunk:
            signal = self.signal[where]
            self.energy[where] = (signal.real.astype(float) ** 2 + signal.imag**2).sum(axis=1)
            products = self.moments.products(signal, self.energy[where], self.nuisance[where])
            self.linear[where], self.left[where] = _projected(products)
            return _Chunk(where, products)

        self.chunks = list(self._pool.map(begin, parts))

    def _scanned(self, parts: list[slice]) -> tuple[FloatArray, FloatArray]:
        """Trial shifts and the energy within the patterns' span under each, pooled nearby.

        The span is that of real amounts if the phase is held. Only the early times that hold 99 %
        of the patterns' energy are used; they resolve no finer.
        """
        times = self.moments.times
        share = np.cumsum((np.abs(self.courses) ** 2).sum(axis=1))
        early = max(int(np.searchsorted(share, 0.99 * share[-1])) + 1, min(8, len(times)))
        real = not self.rules[2].free
        span = _orthonormal(self.courses[:early], real)
        step = 0.5 / float(times[early - 1] - times[0] + 1e-9)
        count = int(np.ceil(self.rules[0].bound / step))
        shifts = np.linspace(-self.rules[0].bound, self.rules[0].bound, 2 * count + 1)
        turn = np.exp(2j * np.pi * shifts[:, None] * times[:early])  # conjugate of the shift
        probe = (turn.T[:, :, None] * span.conj()[:, None]).reshape(early, -1).astype(np.complex64)
        energy = np.empty((len(shifts), len(self.signal)), np.float32)

        def scan(where: slice) -> None:
            inside = self.signal[where, :early] @ probe
            power = inside.real**2 if real else inside.real**2 + inside.imag**2
            power = power.reshape(len(inside), len(shifts), -1)
            energy[:, where] = power.sum(axis=2).T / self.sigma[where] ** 2

        list(self._pool.map(scan, parts))
        if np.isfinite(self.rules[0].tie):
            reach = (0.5, self.rules[0].reach_voxels, self.rules[0].reach_voxels)
            smooth = self._pool.map(
                lambda e: gaussian_filter(e.reshape(self.shape), reach).ravel(), energy
            )
            energy = np.stack(list(smooth))
        return shifts, energy

    def _step(self, chunk: _Chunk, centres: FloatArray) -> None:
        """One step of the nuisances, halved where χ² with the ties would rise."""
        if chunk.settled:
            return
        where, products = chunk.where, chunk.products
        centres = centres[where]
        nuisance, linear = self.nuisance[where], self.linear[where]
        inverse, gradient = self._inverse(products, linear, where)
        first = linear.shape[1]
        for place, which in enumerate(self.free):
            tie = self.rules[which].tie
            if np.isfinite(tie):
                gradient[:, first + place] += (centres[:, which] - nuisance[:, which]) / tie**2
        step = np.einsum("vij,vj->vi", inverse, gradient)[:, first:]
        before = self._cost(self.left[where], nuisance, centres, where)
        pending = np.arange(len(linear))
        old = nuisance.copy()
        for share in 0.5 ** np.arange(HALVINGS + 1):
            new = old[pending].copy()
            for place, which in enumerate(self.free):
                low = 0.0 if which == 1 else -self.rules[which].bound
                moved = new[:, which] + share * step[pending, place]
                new[:, which] = np.clip(moved, low, self.rules[which].bound)
            rows = np.arange(where.start, where.start + len(old))[pending]
            trial = self.moments.products(self.signal[rows], self.energy[rows], new)
            amounts, left = _projected(trial)
            cost = self._cost(left, new, centres[pending], rows)
            good = cost <= before[pending] * (1 + 1e-6) + 1e-3
            taken = pending[good]
            nuisance[taken], linear[taken] = new[good], amounts[good]
            products.put(taken, trial if good.all() else _picked(trial, good))
            self.left[where.start + taken] = left[good]
            pending = pending[~good]
            if not pending.size:
                break
        variance = np.einsum("vii->vi", inverse)[:, first:]
        moved = (nuisance - old)[:, self.free]
        self._moved[where] = np.sqrt((moved**2 / np.maximum(variance, 1e-30)).max(axis=1))
        chunk.settled = bool(self._moved[where].max() < ENOUGH / 2)

    def _inverse(
        self, products: Products, linear: FloatArray, where: slice | NDArray[np.integer]
    ) -> tuple[FloatArray, FloatArray]:
        """Inverse of the weighted normal matrix with the ties' curvature, and the gradient."""
        normal, gradient = products.full_system(linear, self.free)
        weight = 2 / self.sigma[where].astype(float) ** 2
        normal *= weight[:, None, None]
        first = linear.shape[1]
        for place, which in enumerate(self.free):
            tie = self.rules[which].tie
            if np.isfinite(tie):
                normal[:, first + place, first + place] += 1 / tie**2
        return _inverted(normal), gradient * weight[:, None]

    def _cost(
        self,
        left: FloatArray,
        nuisance: FloatArray,
        centres: FloatArray,
        where: slice | NDArray[np.integer],
    ) -> FloatArray:
        """χ² from Σ|residual|², in its own units, with the ties."""
        cost = 2 * left / self.sigma[where].astype(float) ** 2
        for which in self.free:
            tie = self.rules[which].tie
            if np.isfinite(tie):
                cost = cost + ((nuisance[:, which] - centres[:, which]) / tie) ** 2
        return cost

    def _keep_errors(self, chunk: _Chunk) -> None:
        where, parts = chunk.where, self.members.shape[1]
        inverse, _ = self._inverse(chunk.products, self.linear[where], where)
        first = self.linear.shape[1]
        variance = np.einsum("vii->vi", inverse)
        for place, which in enumerate(self.free):
            self.nuisance_error[where, which] = np.sqrt(np.maximum(variance[:, first + place], 0))
        inside = inverse[:, :parts, :parts]
        self.covariance[where] = self.members @ inside @ self.members.T

    def _blank_ratio(self) -> FloatArray:
        """Error of each amount were it absent, over its error, by plane, (patterns, nz)."""
        planes = np.arange(len(self.signal)).reshape(self.shape[0], -1)
        ratio = np.ones((len(self.patterns), self.shape[0]))
        if not self.free:
            return ratio
        for level, plane in enumerate(planes):
            rows = plane[:: max(1, len(plane) // BLANKS)]
            rows = rows[self.noise.known.ravel()[rows]]
            if not rows.size:
                continue
            args = self.signal[rows], self.energy[rows], self.nuisance[rows]
            products = self.moments.products(*args)
            for place, mine in enumerate(self.members):
                linear = self.linear[rows].copy()
                linear[:, : len(mine)][:, mine > 0] = 0
                inverse, _ = self._inverse(products, linear, rows)
                inside = inverse[:, : len(mine), : len(mine)]
                blank = np.einsum("p,vpq,q->v", mine, inside, mine).mean()
                ratio[place, level] = np.sqrt(blank / self.covariance[rows, place, place].mean())
        return ratio

    def _neighbourhood(self) -> FloatArray:
        """Mean of each nuisance around every voxel, weighted by signal power, (V, 3)."""
        power = (np.abs(self.signal[:, 0]) / self.sigma) ** 2
        weight = power.reshape(self.shape)
        centres = np.zeros_like(self.nuisance)
        for which in self.free:
            rule = self.rules[which]
            if np.isfinite(rule.tie):
                reach = (0.5, rule.reach_voxels, rule.reach_voxels)
                field_ = self.nuisance[:, which].reshape(self.shape)
                total = gaussian_filter(weight, reach, mode="nearest") + 1e-30
                mean = gaussian_filter(weight * field_, reach, mode="nearest") / total
                centres[:, which] = mean.ravel()
        return centres

    def predicted(self, where: slice) -> ComplexArray:
        """The model, (V, times)."""
        linear, parts = self.linear[where].astype(np.float32), self.members.shape[1]
        lines = linear[:, :parts].astype(np.complex64) @ self.courses.T.astype(np.complex64)
        broad = (linear[:, parts::2] + 1j * linear[:, parts + 1 :: 2]).astype(np.complex64)
        return lines * self.moments.factor(self.nuisance[where]) + broad @ self.broad.T.astype(
            np.complex64
        )

    def result(self) -> Fitted:
        """Amounts in mM; voxels of unknown noise get amount 0 and an infinite error."""
        count, unknown = len(self.patterns), ~self.noise.known.ravel()
        amounts = self.linear[:, : self.members.shape[1]] @ self.members.T / self.scale
        spread = np.sqrt(np.maximum(np.einsum("vpp->vp", self.covariance), 0)) / self.scale
        amounts[unknown], spread[unknown] = 0, np.inf
        error = spread.T.reshape(count, *self.shape).astype(np.float32)
        model, rest = np.empty_like(self.signal), np.empty(len(self.signal))
        for chunk in self.chunks:
            model[chunk.where] = self.predicted(chunk.where)
            left = self.signal[chunk.where] - model[chunk.where]
            rest[chunk.where] = (left.real**2 + left.imag**2).sum(axis=1)
        degrees = max(1.0, self.noise.dimensions - 0.5 * (self.linear.shape[1] + len(self.free)))
        like, partner = _closest(self.covariance)
        shift, decay, phase = (self.nuisance[:, i].reshape(self.shape) for i in range(3))
        return Fitted(
            names=tuple(p.name for p in self.patterns),
            amounts=amounts.T.reshape(count, *self.shape).astype(np.float32),
            standard_error=error,
            shift_Hz=shift,
            decay_per_s=decay,
            phase_rad=phase,
            nuisance_error=self.nuisance_error.T.reshape(3, *self.shape),
            chi_squared=(rest / self.sigma**2 / degrees).reshape(self.shape).astype(np.float32),
            model=model.T.reshape(-1, *self.shape),
            degrees_of_freedom=degrees,
            blank_error=error * self._blank_ratio()[:, :, None, None].astype(np.float32),
            correlation=like.T.reshape(count, *self.shape),
            partner=partner.T.reshape(count, *self.shape),
            bounds=tuple(rule.bound if rule.free else 0.0 for rule in self.rules),
        )


def _orthonormal(courses: ComplexArray, real: bool) -> ComplexArray:
    """A basis of the courses' real or complex span, orthonormal under Re Σ a* b or Σ a* b."""
    if not real:
        return np.linalg.qr(courses)[0]
    stacked, _ = np.linalg.qr(np.concatenate([courses.real, courses.imag]))
    return stacked[: len(courses)] + 1j * stacked[len(courses) :]


def _projected(products: Products) -> tuple[FloatArray, FloatArray]:
    """Best amounts and baseline (V, n), and Σ|y − model|² at them."""
    normal, right = products.linear_system()
    size = np.sqrt(np.maximum(np.einsum("vii->vi", normal), 0))
    size[size == 0] = 1
    scaled = normal / (size[:, :, None] * size[:, None])
    diagonal = np.arange(size.shape[1])
    scaled[:, diagonal, diagonal] += TINY
    found = np.linalg.solve(scaled, (right / size)[..., None])[..., 0] / size
    inside = np.matmul(normal, found[..., None])[..., 0]
    return found, products.energy - ((2 * right - inside) * found).sum(axis=1)


def _inverted(normal: FloatArray) -> FloatArray:
    """Inverse after scaling to a unit diagonal, kept from breaking by `TINY` of it."""
    size = np.sqrt(np.maximum(np.einsum("vii->vi", normal), 0))
    size[size == 0] = 1
    scale = 1 / (size[:, :, None] * size[:, None])
    scaled = normal * scale
    diagonal = np.arange(size.shape[1])
    scaled[:, diagonal, diagonal] += TINY
    return np.linalg.inv(scaled) * scale


def _picked(products: Products, good: NDArray[np.bool_]) -> Products:
    names = ("data", "pairs", "mixed", "broad_data", "energy")
    parts = {name: getattr(products, name)[good] for name in names}
    return Products(broad_pairs=products.broad_pairs, **parts)


def _closest(covariance: FloatArray) -> tuple[FloatArray, NDArray[np.int16]]:
    """Largest |correlation| of each amount with another, and which, both (V, patterns)."""
    spread = np.sqrt(np.maximum(np.einsum("vpp->vp", covariance), 1e-30))
    like = np.abs(covariance) / (spread[:, :, None] * spread[:, None])
    diagonal = np.arange(like.shape[1])
    like[:, diagonal, diagonal] = -1
    partner = like.argmax(axis=2)
    largest = np.maximum(np.take_along_axis(like, partner[..., None], 2)[..., 0], 0)
    return largest.astype(np.float32), partner.astype(np.int16)
