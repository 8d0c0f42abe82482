"""Field drift: the frequency of every shot, from the lines it holds.

A drift of the bias field turns shot j by exp(−i 2π ν_j t). With the lines' time courses Φ and free
images of every species in every shot, ν_j is where turning back puts most energy into what Φ spans,

    E_j(ν) = Σ_c v_c ‖Qᴴ (e^{i 2π ν t} y_jc)‖²,     Q an orthonormal basis of Φ,

which needs no image, no encoding and no other shot (separable least squares; Golub and Pereyra,
SIAM J. Numer. Anal. 10:413, 1973). A reference line is the same with one species in Φ. Over the
shots the frequencies may then be smoothed as a random walk.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solveh_banded
from scipy.optimize import minimize_scalar

from recon.basis import sampled_course
from recon.errors import InputError
from recon.record import Record
from recon.solvers.estimate import Progress, silent

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


SEEN = 10.0
"""Energy above the noise, in its own standard deviations, below which a shot shows no line."""

UNKNOWN_HZ = 1e6
"""Standard error of a frequency of which a shot says nothing."""


@dataclass(frozen=True)
class LineDrift:
    """Settings.

    Attributes
    ----------
    species
        Names of the species whose lines serve; all of them if empty. One strong, isolated species
        is a reference line.
    reach_Hz
        Farthest frequency looked for.
    smooth
        Take the frequencies as a random walk in the clock's time, its size from the data.
    """

    species: tuple[str, ...] = ()
    reach_Hz: float = 20.0  # noqa: N815
    smooth: bool = True

    def __post_init__(self) -> None:
        if not self.reach_Hz > 0:
            raise InputError("reach_Hz must be positive", "field drift")


@dataclass(frozen=True, eq=False)
class Drift:
    """Frequencies of the shots relative to the description, and their standard errors, Hz.

    `raw_Hz` and `raw_error_Hz` are each shot's own; `frequency_Hz`, `error_Hz` after smoothing.
    """

    clock_time: FloatArray
    raw_Hz: FloatArray  # noqa: N815
    raw_error_Hz: FloatArray  # noqa: N815
    frequency_Hz: FloatArray  # noqa: N815
    error_Hz: FloatArray  # noqa: N815


def measure_drift(
    record: Record, settings: LineDrift | None = None, progress: Progress = silent
) -> Drift:
    """The frequency of every shot.

    Raises
    ------
    InputError
        A named species is unknown, a line cannot be followed with these sample times, or the
        record carries no description.
    """
    settings = settings or LineDrift()
    raw, error = np.empty(len(record)), np.empty(len(record))
    weight = _channel_weights(record)
    for where, samples in record.shots():
        for place, of_shot in enumerate(samples):
            shot = where.start + place
            flat = of_shot.reshape(len(of_shot), -1) * np.sqrt(weight)
            spread = (flat @ flat.conj().T).astype(complex)
            line = _Lines.of(record, settings, float(record.protocol.evolution_time[shot]))
            variance = record.noise_sd**2 / record.protocol.averages[shot]
            raw[shot], error[shot] = line.frequency(
                spread, variance, int((weight > 0).sum()), settings.reach_Hz
            )
        progress("following the field", where.stop / len(record))
    clock = np.asarray(record.protocol.clock_time)
    if settings.smooth and len(record) > 4:
        smooth, smooth_error = smoothed_walk(clock, raw, error)
        return Drift(clock, raw, error, smooth, smooth_error)
    return Drift(clock, raw, error, raw, error)


def _channel_weights(record: Record) -> NDArray[np.float32]:
    shape = record.shape[2:]
    weight = np.ones(shape, np.float32) if record.channel_weight is None else record.channel_weight
    return weight.ravel()


@dataclass(frozen=True, eq=False)
class _Lines:
    """Time courses of the lines that serve: Q (times, species), and the times."""

    basis: ComplexArray
    times: FloatArray

    @classmethod
    def of(cls, record: Record, settings: LineDrift, evolution: float) -> _Lines:
        species = record.specimen.species
        names = [one.name for one in species]
        for name in settings.species:
            if name not in names:
                raise InputError(f"'{name}' is not among {', '.join(names)}", "reference line")
        chosen = [one for one in species if not settings.species or one.name in settings.species]
        courses = [
            sampled_course(one, record.instrument, record.protocol, evolution) for one in chosen
        ]
        basis, triangle = np.linalg.qr(np.stack(courses, axis=1))
        times = np.asarray(record.protocol.sample_times + evolution)
        if len(times) < len(chosen) + 2 or np.abs(np.diag(triangle)).min() < 1e-6:
            raise InputError(
                f"{len(times)} samples do not fix a frequency beside {len(chosen)} species",
                "field drift",
                "use fewer species, or a shift that was measured otherwise",
            )
        return cls(np.asarray(basis, complex), times)

    def energy(self, spread: ComplexArray, frequency: float) -> float:
        """E(ν)."""
        turned = self.basis * np.exp(-2j * np.pi * frequency * self.times)[:, None]
        return float(np.einsum("ts,tu,us->", turned.conj(), spread, turned).real)

    def frequency(
        self, spread: ComplexArray, variance: float, channels: int, reach: float
    ) -> tuple[float, float]:
        """ν and its standard error."""
        width = 1 / max(float(np.ptp(self.times)), 1e-12)
        grid = np.arange(-reach, reach + width / 8, width / 6)
        best = grid[int(np.argmax([self.energy(spread, f) for f in grid]))]
        found = minimize_scalar(
            lambda f: -self.energy(spread, f),
            bounds=(best - width / 3, best + width / 3),
            method="bounded",
            options={"xatol": 1e-5 * width},
        )
        value = float(found.x)
        return value, self._error(spread, value, variance, channels)

    def _error(
        self, spread: ComplexArray, frequency: float, variance: float, channels: int
    ) -> float:
        """Standard error with the images' energy as found, its noise taken off.

        With B the slope of Q beyond Q and κ = Σ_c |B I_c|², E″ = −2κ and E′ has the variance
        2σ²κ + 2 n σ⁴ |B|² over n channels: the second term, noise upon noise, is what summing weak
        channels costs.
        """
        turn = np.exp(2j * np.pi * frequency * self.times)
        straight = turn[:, None] * spread * turn.conj()
        images = self.basis.conj().T @ straight @ self.basis
        noise = variance * channels * len(images)
        if np.trace(images).real < noise + SEEN * variance * (1 + np.sqrt(channels * len(images))):
            return UNKNOWN_HZ
        images -= variance * channels * np.eye(len(images))
        values, vectors = np.linalg.eigh(images)
        images = (vectors * np.maximum(values, 0)) @ vectors.conj().T
        slope = 2 * np.pi * self.times[:, None] * self.basis
        slope = slope - self.basis @ (self.basis.conj().T @ slope)
        strength = max(float(np.trace(slope.conj().T @ slope @ images).real), 1e-300)
        excess = channels * variance * float((np.abs(slope) ** 2).sum()) / strength
        return float(min(np.sqrt(variance / (2 * strength) * (1 + excess)), UNKNOWN_HZ))


def smoothed_walk(
    clock: FloatArray, values: FloatArray, errors: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """A random walk through noisy values: the posterior mean and standard deviation.

    Increments have variance ρ Δt; ρ maximises the marginal likelihood (local-level model; Durbin
    and Koopman, Time Series Analysis by State Space Methods, 2012, chapter 2). Times closer than a
    thousandth of the median step count as that far apart.
    """
    order = np.argsort(clock, kind="stable")
    v, e = values[order], np.maximum(errors[order], 1e-12)
    steps = np.diff(clock[order])
    usual = float(np.median(steps)) if steps.size else 1.0
    steps = np.maximum(steps, 1e-3 * max(usual, 1e-12))
    typical = max(float(np.median(np.diff(v) ** 2)), float(np.median(e**2)) * 1e-3, 1e-30) / usual

    def cost(log_rate: float) -> float:
        return -_walk(v, e, steps, np.exp(log_rate))[2]

    centre = np.log(typical)
    best = minimize_scalar(cost, bounds=(centre - 14, centre + 4), method="bounded")
    mean, sd, _ = _walk(v, e, steps, float(np.exp(best.x)))
    smooth, spread = np.empty_like(v), np.empty_like(v)
    smooth[order], spread[order] = mean, sd
    return smooth, spread


def _walk(
    values: FloatArray, errors: FloatArray, steps: FloatArray, rate: float
) -> tuple[FloatArray, FloatArray, float]:
    """Posterior mean, standard deviation and log marginal likelihood for one ρ."""
    coupling = 1 / (rate * steps)
    diagonal = 1 / errors**2
    diagonal[:-1] += coupling
    diagonal[1:] += coupling
    banded = np.zeros((2, len(values)))
    banded[0, 1:], banded[1] = -coupling, diagonal
    mean = solveh_banded(banded, values / errors**2)
    inverse_diagonal, log_determinant = _tridiagonal(diagonal, coupling)
    fit = float((values * (values - mean) / errors**2).sum())
    likelihood = -0.5 * (fit + log_determinant - np.log(coupling).sum() + 2 * np.log(errors).sum())
    return mean, np.sqrt(inverse_diagonal), float(likelihood)


def _tridiagonal(diagonal: FloatArray, coupling: FloatArray) -> tuple[FloatArray, float]:
    """Diagonal of the inverse and log determinant of a tridiagonal matrix (−coupling beside)."""
    count = len(diagonal)
    forward, backward = diagonal.copy(), diagonal.copy()
    for k in range(1, count):
        forward[k] -= coupling[k - 1] ** 2 / forward[k - 1]
        backward[-1 - k] -= coupling[-k] ** 2 / backward[-k]
    return 1 / (forward + backward - diagonal), float(np.log(forward).sum())
