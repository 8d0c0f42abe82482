"""Fit every voxel's time course at once.

    y(t) = e^{iθ − i2πΔf t − Γt} Σ_p a_p φ_p(t) + Σ_b c_b β_b(t) + noise

Real amounts a, nuisance phase θ, shift Δf and extra decay Γ per voxel, complex baseline c.
Gauss–Newton with step halving on all voxels side by side; Δf, Γ and θ are bounded and tied to
their neighbourhood by a quadratic penalty. The standard error is the Cramér–Rao bound

    F = 2 Re(Jᴴ J)/σ²,     E|n|² = σ² per complex sample,

with the penalty's curvature added. Sources: Kay, Fundamentals of Statistical Signal Processing
(1993); Levenberg, Quart. Appl. Math. 2:164 (1944).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from recon.errors import InputError
from recon.quantify.fitted import Fitted
from recon.quantify.patterns import Baseline, Pattern, check_distinct
from recon.result import Cube

ComplexArray = NDArray[np.complexfloating]
FloatArray = NDArray[np.floating]
CHUNK = 256


@dataclass(frozen=True)
class Nuisance:
    """One nuisance parameter.

    Attributes
    ----------
    bound
        Largest magnitude (or largest value, for the decay, which is not negative).
    tie
        How far a voxel may stray from its neighbourhood's mean, one standard deviation; infinite
        for no tie, 0 to hold the parameter at zero.
    reach_voxels
        Size of the neighbourhood, standard deviation of its Gaussian.
    """

    bound: float
    tie: float = np.inf
    reach_voxels: float = 1.5

    def __post_init__(self) -> None:
        if not (self.bound >= 0 and self.tie >= 0 and self.reach_voxels > 0):
            raise InputError("bound and tie must not be negative", "nuisance")

    @property
    def free(self) -> bool:
        """It is fitted at all."""
        return self.bound > 0 and self.tie > 0


@dataclass(frozen=True)
class Fit:
    """Settings.

    Attributes
    ----------
    shift_Hz, decay_per_s, phase_rad
        The nuisances.
    baseline
        Broad signal.
    iterations
        Gauss–Newton steps at most.
    tolerance
        Relative fall of χ² below which a sweep over all voxels ends the fit.
    """

    shift_Hz: Nuisance = field(default_factory=lambda: Nuisance(30.0, 3.0))  # noqa: N815
    decay_per_s: Nuisance = field(default_factory=lambda: Nuisance(60.0, 5.0))
    phase_rad: Nuisance = field(default_factory=lambda: Nuisance(0.0))
    baseline: Baseline = field(default_factory=Baseline)
    iterations: int = 12
    tolerance: float = 5e-4

    def fit(
        self,
        cube: Cube,
        patterns: Sequence[Pattern],
        noise_sd: FloatArray | None = None,
        progress: Callable[[int, int], None] | None = None,
    ) -> Fitted:
        """Fit all voxels.

        Parameters
        ----------
        noise_sd
            Standard deviation of a complex time sample per voxel, (nz, ny, nx), A/m; by default the
            r.m.s. over time of the cube's standard errors.

        Raises
        ------
        InputError
            No pattern, patterns that cannot be told apart, or no noise.
        """
        if not patterns:
            raise InputError("there is no pattern to fit", "fit")
        check_distinct(patterns)
        work = _Work(self, cube, patterns, _noise(cube, noise_sd))
        work.start()
        before = work.chi_squared().sum()
        for step in range(self.iterations):
            work.sweep()
            after = work.chi_squared().sum()
            if progress is not None:
                progress(step + 1, self.iterations)
            if before - after < self.tolerance * max(after, 1e-300):
                break
            before = after
        return work.result()


class _Work:
    """Arrays over voxels (V) during a fit; parameters run (V, parameters)."""

    def __init__(
        self, settings: Fit, cube: Cube, patterns: Sequence[Pattern], noise: FloatArray
    ) -> None:
        self.settings, self.shape = settings, cube.grid.shape
        self.patterns = patterns
        self.times = np.asarray(cube.sample_times, np.float32)
        count = len(self.times)
        self.signal = np.ascontiguousarray(cube.values.reshape(count, -1).T)
        self.sigma = noise.reshape(-1).astype(np.float32)
        courses = np.concatenate([pattern.courses for pattern in patterns], axis=1)
        self.scale = float(np.sqrt(np.mean(np.abs(courses) ** 2)))
        self.basis = (courses / self.scale).astype(np.complex64)
        self.broad = settings.baseline.courses(cube.sample_times).astype(np.complex64)
        self.owner = np.repeat(np.arange(len(patterns)), [p.courses.shape[1] for p in patterns])
        steps = np.diff(cube.sample_times)
        self._even = len(steps) > 1 and bool(np.allclose(steps, steps[0], rtol=1e-6, atol=0))
        voxels = len(self.signal)
        self.linear = np.zeros((voxels, self.parts + 2 * self.broad.shape[1]), np.float32)
        self.nuisance = np.zeros((voxels, 3), np.float32)
        self.errors = np.zeros((voxels, self.linear.shape[1] + 3), np.float32)
        self.amount_covariance = np.zeros((voxels, len(patterns)), np.float32)

    @property
    def parts(self) -> int:
        return self.basis.shape[1]

    @property
    def rules(self) -> tuple[Nuisance, Nuisance, Nuisance]:
        return self.settings.shift_Hz, self.settings.decay_per_s, self.settings.phase_rad

    def chunks(self) -> list[slice]:
        return [slice(i, i + CHUNK) for i in range(0, len(self.signal), CHUNK)]

    def start(self) -> None:
        """Shift of every voxel by a scan: the one under which the patterns hold most energy."""
        rule = self.rules[0]
        if rule.free:
            step = 0.5 / float(self.times[-1] - self.times[0] + 1e-9)
            count = int(np.ceil(rule.bound / step))
            shifts = np.linspace(-rule.bound, rule.bound, 2 * count + 1)
            energy = np.stack([self._energy(shift) for shift in shifts])
            self.nuisance[:, 0] = self._smooth_choice(shifts, energy)
        self._each(lambda part: self._solve(part, np.zeros((0, 3))))

    def _each(self, work: Callable[[slice], None]) -> None:
        """Chunks of voxels are independent; two threads share them."""
        with ThreadPoolExecutor(2) as pool:
            list(pool.map(work, self.chunks()))

    def _energy(self, shift: float) -> FloatArray:
        """Energy of every voxel's signal within the span of the shifted patterns."""
        turned = self.basis * np.exp(-2j * np.pi * shift * self.times[:, None])
        span, _ = np.linalg.qr(turned.astype(np.complex64))
        inside = self.signal @ span.conj()
        return (inside.real**2 + inside.imag**2).sum(axis=1)

    def _smooth_choice(self, shifts: FloatArray, energy: FloatArray) -> FloatArray:
        """The best shift of every voxel after energies, in units of noise, are pooled nearby."""
        rule = self.rules[0]
        pooled = energy / self.sigma**2
        if np.isfinite(rule.tie):
            reach = (0.5, rule.reach_voxels, rule.reach_voxels)
            pooled = np.stack(
                [gaussian_filter(e.reshape(self.shape), reach).ravel() for e in pooled]
            )
        return shifts[np.argmax(pooled, axis=0)].astype(np.float32)

    def sweep(self) -> None:
        """One Gauss–Newton step for all voxels, with halving where χ² would rise."""
        centres = self._neighbourhood()
        self._each(lambda part: self._solve(part, centres[part]))

    def factor(self, nuisance: FloatArray) -> ComplexArray:
        """e^{iθ − i2πΔf t − Γt}, (V, times); evenly spaced times as products of few powers."""
        shift, decay, phase = nuisance.T.astype(np.float64)
        rate = -2j * np.pi * shift - decay
        if not self._even:
            return np.exp(1j * phase[:, None] + rate[:, None] * self.times).astype(np.complex64)
        count, dwell = len(self.times), float(self.times[1] - self.times[0])
        inner = int(np.ceil(np.sqrt(count)))
        fine = np.exp(rate[:, None] * (dwell * np.arange(inner)) + 1j * phase[:, None])
        start = float(self.times[0])
        coarse = np.exp(rate[:, None] * (start + dwell * inner * np.arange(-(-count // inner))))
        grid = coarse.astype(np.complex64)[:, :, None] * fine.astype(np.complex64)[:, None]
        return grid.reshape(len(nuisance), -1)[:, :count]

    def predicted(self, linear: FloatArray, nuisance: FloatArray) -> ComplexArray:
        """The model, (V, times)."""
        lines = linear[:, : self.parts] @ self.basis.T
        broad = linear[:, self.parts :].reshape(len(linear), -1, 2)
        base = (broad[..., 0] + 1j * broad[..., 1]).astype(np.complex64) @ self.broad.T
        return lines * self.factor(nuisance) + base

    def chi_squared(self) -> FloatArray:
        """Σ|residual|²/σ² per voxel."""
        total = np.empty(len(self.signal))
        for part in self.chunks():
            rest = self.signal[part] - self.predicted(self.linear[part], self.nuisance[part])
            total[part] = (rest.real**2 + rest.imag**2).sum(axis=1) / self.sigma[part] ** 2
        return total

    def _solve(self, part: slice, centres: FloatArray) -> None:
        nuisance, linear = self.nuisance[part], self.linear[part]
        factor = self.factor(nuisance)
        columns = self._columns(factor, linear, nonlinear=len(centres) > 0)
        rest = self.signal[part] - self.predicted(linear, nuisance)
        before = self._cost_of(rest, part, nuisance, centres)
        weight = 2 / self.sigma[part] ** 2
        normal = np.matmul(columns.conj(), columns.transpose(0, 2, 1)).real * weight[:, None, None]
        right = np.matmul(columns.conj(), rest[..., None])[..., 0].real * weight[:, None]
        free = [i for i, rule in enumerate(self.rules) if rule.free] if len(centres) else []
        first = linear.shape[1]
        for place, which in enumerate(free):
            tie = self.rules[which].tie
            if np.isfinite(tie):
                normal[:, first + place, first + place] += 1 / tie**2
                right[:, first + place] += (centres[:, which] - nuisance[:, which]) / tie**2
        size = np.sqrt(np.einsum("vii->vi", normal))
        size[size == 0] = 1
        scaled = normal / (size[:, :, None] * size[:, None])
        scaled[:, np.arange(size.shape[1]), np.arange(size.shape[1])] += 1e-6
        inverse = np.linalg.inv(scaled) / (size[:, :, None] * size[:, None])
        step = np.matmul(inverse, right[..., None])[..., 0]
        self._take(part, step, free, centres, before)
        self._keep_errors(part, inverse, free)

    def _columns(self, factor: ComplexArray, linear: FloatArray, nonlinear: bool) -> ComplexArray:
        """Derivatives of the model, (V, parameters, times)."""
        lines = factor[:, None] * self.basis.T
        parts = [lines]
        if self.broad.shape[1]:
            broad = np.broadcast_to(self.broad.T, (len(factor), *self.broad.T.shape))
            both = np.stack([broad, 1j * broad], axis=2)
            parts.append(both.reshape(len(factor), -1, len(self.times)))
        if nonlinear:
            model = np.einsum("vpt,vp->vt", lines, linear[:, : self.parts])
            slopes = (-2j * np.pi * self.times, -self.times, 1j * np.ones_like(self.times))
            chosen = [s for s, rule in zip(slopes, self.rules, strict=True) if rule.free]
            if chosen:
                parts.append(np.stack([model * s.astype(np.complex64) for s in chosen], axis=1))
        return np.concatenate(parts, axis=1) if len(parts) > 1 else lines

    def _take(
        self,
        part: slice,
        step: FloatArray,
        free: list[int],
        centres: FloatArray,
        before: FloatArray,
    ) -> None:
        """Take the step, halved up to three times where χ² (with the ties) would rise."""
        linear, nuisance = self.linear[part], self.nuisance[part]
        first = linear.shape[1]
        pending = np.ones(len(linear), bool)
        for share in (1.0, 0.5, 0.25, 0.125):
            new_linear = linear + np.float32(share) * step[:, :first]
            new = nuisance.copy()
            for place, which in enumerate(free):
                low = 0.0 if which == 1 else -self.rules[which].bound
                moved = nuisance[:, which] + share * step[:, first + place]
                new[:, which] = np.clip(moved, low, self.rules[which].bound)
            good = pending & (self._cost(part, new_linear, new, centres) <= before * (1 + 1e-6))
            self.linear[part][good] = new_linear[good]
            self.nuisance[part][good] = new[good]
            pending &= ~good
            if not pending.any() or not free:
                break

    def _cost(
        self, part: slice, linear: FloatArray, nuisance: FloatArray, centres: FloatArray
    ) -> FloatArray:
        rest = self.signal[part] - self.predicted(linear, nuisance)
        return self._cost_of(rest, part, nuisance, centres)

    def _cost_of(
        self, rest: ComplexArray, part: slice, nuisance: FloatArray, centres: FloatArray
    ) -> FloatArray:
        cost = 2 * (rest.real**2 + rest.imag**2).sum(axis=1) / self.sigma[part] ** 2
        for which, rule in enumerate(self.rules):
            if len(centres) and rule.free and np.isfinite(rule.tie):
                cost = cost + ((nuisance[:, which] - centres[:, which]) / rule.tie) ** 2
        return cost

    def _keep_errors(self, part: slice, inverse: FloatArray, free: list[int]) -> None:
        first = self.linear.shape[1]
        variance = np.einsum("vii->vi", inverse)
        self.errors[part, :first] = np.sqrt(np.maximum(variance[:, :first], 0))
        for place, which in enumerate(free):
            self.errors[part, first + which] = np.sqrt(np.maximum(variance[:, first + place], 0))
        for pattern in range(len(self.patterns)):
            mine = np.flatnonzero(self.owner == pattern)
            block = inverse[:, mine[:, None], mine]
            self.amount_covariance[part, pattern] = block.sum(axis=(1, 2))

    def _neighbourhood(self) -> FloatArray:
        """Mean of each nuisance around every voxel, weighted by signal power, (V, 3)."""
        power = (np.abs(self.signal[:, 0]) / self.sigma) ** 2
        weight = power.reshape(self.shape)
        centres = np.zeros_like(self.nuisance)
        for which, rule in enumerate(self.rules):
            if rule.free and np.isfinite(rule.tie):
                reach = (0.5, rule.reach_voxels, rule.reach_voxels)
                field_ = self.nuisance[:, which].reshape(self.shape)
                total = gaussian_filter(weight, reach, mode="nearest") + 1e-30
                mean = gaussian_filter(weight * field_, reach, mode="nearest") / total
                centres[:, which] = mean.ravel()
        return centres

    def result(self) -> Fitted:
        """Amounts in mM."""
        first, count = self.linear.shape[1], len(self.patterns)
        amounts = np.zeros((count, len(self.signal)), np.float32)
        np.add.at(amounts, self.owner, self.linear[:, : self.parts].T)
        free = sum(rule.free for rule in self.rules)
        degrees = max(1.0, len(self.times) - 0.5 * (first + free))
        model = np.empty_like(self.signal)
        for part in self.chunks():
            model[part] = self.predicted(self.linear[part], self.nuisance[part])
        shift, decay, phase = (self.nuisance[:, i].reshape(self.shape) for i in range(3))
        return Fitted(
            names=tuple(p.name for p in self.patterns),
            amounts=amounts.reshape(count, *self.shape) / np.float32(self.scale),
            standard_error=np.sqrt(self.amount_covariance.T).reshape(count, *self.shape)
            / np.float32(self.scale),
            shift_Hz=shift,
            decay_per_s=decay,
            phase_rad=phase,
            nuisance_error=self.errors[:, first:].T.reshape(3, *self.shape),
            chi_squared=(self.chi_squared() / degrees).reshape(self.shape),
            model=model.T.reshape(len(self.times), *self.shape),
        )


def _noise(cube: Cube, noise_sd: FloatArray | None) -> FloatArray:
    if noise_sd is None:
        if cube.standard_error is None:
            raise InputError("has no standard errors", "cube", "draw replicas, or state the noise")
        noise_sd = np.sqrt((cube.standard_error.astype(float) ** 2).mean(axis=0))
    noise_sd = np.broadcast_to(np.asarray(noise_sd, float), cube.grid.shape)
    if not np.isfinite(noise_sd).all() or (noise_sd < 0).any() or not (noise_sd > 0).any():
        raise InputError("noise must be finite, not negative, and somewhere positive", "fit")
    return np.maximum(noise_sd, 1e-3 * noise_sd[noise_sd > 0].min())
