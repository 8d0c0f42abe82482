"""Data as they really come: every imperfection against a converged generic solver.

    python bench/general.py --json

64 × 64 × 6 voxels of the invented muscle, 128 shots, one time point, ridge weight 0.05 (what the
automatic choice gives here, within a factor of 1.2). Records come from the simulator, which shares
nothing with the operator; its samples are then spoilt channel by channel. The patchy layer alone
is made with the operator itself in double precision, for the simulator's layer is even.

Reference: conjugate gradients without preconditioner, complex128, relative residual 1e-7.
Columns: outer iterations until the solution differs from the reference by less than 1e-3, with
graded blocks as preconditioner, with blocks at the mean information, and by filling in (where it
applies, at most 60); iterations of the reference; time of one product with G and of one
preconditioning; error against the truth and mean squared residual in units of the noise, with the
general model and when one pretends that the measurement were ideal.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from common import emit, table, timed
from scipy.ndimage import gaussian_filter

from recon.basis import magnetisation_per_mM
from recon.demo import instrument
from recon.forward import BlockQuadratic, ForwardModel, accumulate
from recon.forward.channels import Channels, LayerDensity
from recon.forward.general import GeneralOperator
from recon.forward.general_model import GeneralModel
from recon.forward.general_statistics import gather
from recon.forward.off_lattice import calibrated
from recon.forward.wide import widened
from recon.grid import Grid
from recon.instrument import Instrument
from recon.planning.tables import VariableDensity
from recon.protocol import Protocol
from recon.simulate import simulate
from recon.solvers.conjugate_gradients import System, advance, begin, iterate, plain_system
from recon.solvers.general import GeneralQuadratic, MajorisedStep
from recon.solvers.loop import Stopping
from recon.solvers.robust import solve_with_trust
from recon.specimen import Specimen
from recon.specimens.muscle import Muscle, MuscleSize
from recon.symbol import Symbol

SHOTS, RIDGE, CLOSE, MOST = 128, 0.05, 1e-3, 60
SHEAR = np.array([[1.02, 0.015, 0], [-0.01, 0.985, 0], [0, 0, 1]])
BASIS = np.ones((1, 1), complex)


@dataclass(frozen=True)
class Spoilt:
    """A record with one imperfection, and what is known of it."""

    name: str
    grid: Grid
    protocol: Protocol
    samples: np.ndarray
    truth: np.ndarray
    known: dict[str, Any] = field(default_factory=dict)
    ideal: np.ndarray | None = None
    outliers: bool = False


def smooth(shape: tuple[int, int], width: float, seed: int) -> np.ndarray:
    """A random map of unit standard deviation."""
    values = gaussian_filter(np.random.default_rng(seed).standard_normal(shape), width, mode="wrap")
    return values / values.std()


def total_magnetisation(specimen: Specimen, apparatus: Instrument) -> np.ndarray:
    """Of all species at time 0, A/m, (1, nz, ny, nx)."""
    scale = magnetisation_per_mM(specimen.species, apparatus)
    return np.tensordot(scale, specimen.concentrations, 1)[None]


def spoilt_records(apparatus: Instrument) -> Iterator[Spoilt]:
    """One imperfection after the other."""
    specimen = Muscle.small().specimen()
    grid = specimen.grid
    protocol = VariableDensity(shots=SHOTS).protocol(grid, np.zeros(1))
    y = simulate(specimen, apparatus, protocol).samples_in_memory()
    truth, rng, shape = total_magnetisation(specimen, apparatus), np.random.default_rng(5), (64, 64)
    noise, ideal = apparatus.field_noise, Channels.ideal(shape)

    def spoil(name: str, samples: np.ndarray, channels: Channels, **more: Any) -> Spoilt:
        return Spoilt(name, grid, protocol, samples, truth, {"channels": channels}, **more)

    field_ = smooth(shape, 1.5, 1)
    dead = field_ > np.quantile(field_, 0.95)
    yield spoil("5 % dead pixels in clusters", np.where(dead, 0, y), ideal.without(dead))
    radius = np.hypot(*np.mgrid[-1:1:64j, -1:1:64j]) / np.sqrt(2)
    gain = (1 - 0.3 * radius**2) * np.exp(0.3j * smooth(shape, 8, 2))
    white = rng.standard_normal((2, *y.shape)) * np.sqrt((1 - np.abs(gain) ** 2) / 2) * noise
    spoilt = y * gain + white[0] + 1j * white[1]  # a dimmer channel is not a quieter one
    yield spoil("gain map, 30 % vignetting", spoilt, ideal.with_gain(gain))
    loud = np.where(smooth(shape, 2, 3) > 1.5, 3.0, 1.0)
    white = rng.standard_normal((2, *y.shape)) * np.sqrt((loud**2 - 1) / 2) * noise
    yield spoil("noisy channels", y + white[0] + 1j * white[1], ideal.with_noise(loud))
    bad = rng.choice(64 * 64, 40, replace=False)
    drift = np.zeros(shape)
    drift.flat[bad] = 30 * noise
    phases = np.exp(2j * np.pi * rng.random((SHOTS, 1, 1, 1)))
    yield spoil("1 % outlier channels", y + drift * phases, ideal, outliers=True)
    kept = np.sort(rng.permutation(SHOTS)[: SHOTS - 32])
    few = protocol.subset(kept)
    yield Spoilt("a quarter of the shots missing", grid, few, y[kept], truth, ideal=y[kept])
    yield patchy(grid, protocol, apparatus, truth)
    true = calibrated(protocol, SHEAR)
    off = simulate(specimen, apparatus, true).samples_in_memory()
    yield Spoilt("sheared gradients, off the lattice", grid, true, off, truth)
    yield wide(apparatus)


def patchy(grid: Grid, protocol: Protocol, apparatus: Instrument, truth: np.ndarray) -> Spoilt:
    """20 % patchy density, from the operator in double precision, with noise."""
    layer = LayerDensity(np.clip(1 + 0.2 * smooth((64, 64), 2, 4), 0.1, 2))
    noise = apparatus.field_noise
    model = GeneralModel.build(grid, apparatus, protocol, BASIS, noise, layer=layer)
    y = GeneralOperator(model, np.complex128).apply(truth.astype(complex))
    white = np.random.default_rng(6).standard_normal((2, *y.shape)) * noise * np.sqrt(0.5)
    y = y + white[0] + 1j * white[1]
    return Spoilt("20 % patchy layer", grid, protocol, y, truth, {"layer": layer})


def wide(apparatus: Instrument) -> Spoilt:
    """A section 1.5 times wider than the view, which sits in its middle."""
    specimen = Muscle(MuscleSize((6, 96, 96), margin=0.02)).specimen()
    view = Muscle.small().grid
    grid, margin = widened(view, (16, 16)), 16
    protocol = VariableDensity(shots=SHOTS).protocol(view, np.zeros(1))
    camera = apparatus.camera
    assert camera is not None and grid.shape == specimen.grid.shape
    large = apparatus.model_copy(
        update={"camera": camera.model_copy(update={"field_of_view_um": (384.0, 384.0)})}
    )
    k, q = protocol.nuclear_wavevector[:, :2], protocol.sensor_wavevector
    first = np.array([margin * grid.voxel[2], margin * grid.voxel[1]])
    moved = replace(protocol, amplitude=protocol.amplitude * np.exp(-1j * ((k + q) @ first)))
    y = simulate(specimen, large, moved).samples_in_memory()[..., 16:80, 16:80]
    truth = total_magnetisation(specimen, apparatus)
    known = {"margin": (margin, margin)}
    return Spoilt("section 1.5 times wider than the view", grid, protocol, y, truth, known)


def until_close(step: Callable[[], np.ndarray], reference: np.ndarray) -> tuple[int, float]:
    """Iterations until close to the reference, and the difference then."""
    size, difference = np.linalg.norm(reference), np.inf
    for iteration in range(1, MOST + 1):
        difference = float(np.linalg.norm(step() - reference) / size)
        if difference < CLOSE:
            return iteration, difference
    return MOST + 1, difference


def reference_solution(quadratic: GeneralQuadratic, samples: np.ndarray) -> tuple[np.ndarray, int]:
    """By conjugate gradients without preconditioner, complex128."""
    model = quadratic.operator.model
    operator = GeneralOperator(model, np.complex128)
    unit = quadratic.unit.astype(float)[:, None, None, None]
    weights = model.weight[:, None, None, None] * model.channels.weight
    b = operator.adjoint(weights * samples) * unit
    system = plain_system(lambda x: operator.normal(x * unit) * unit, Symbol(RIDGE))
    state, _ = iterate(system, b, Stopping(tolerance=1e-7, limit=1500))
    return state.x, state.iteration


def scaled_quadratic(spoilt: Spoilt, apparatus: Instrument) -> GeneralQuadratic:
    model = GeneralModel.build(
        spoilt.grid, apparatus, spoilt.protocol, BASIS, apparatus.field_noise, **spoilt.known
    )
    operator = GeneralOperator(model)
    quadratic = GeneralQuadratic(operator, gather(operator, batches(spoilt)))
    unit = 1 / np.sqrt(quadratic.diagonal().mean(axis=1) / model.mean_information)
    quadratic = quadratic.scaled(unit)
    if not spoilt.outliers:
        return quadratic

    def solver(data: GeneralQuadratic, start: np.ndarray | None) -> np.ndarray:
        return iterate(data.system(Symbol(RIDGE)), data.linear, Stopping(1e-4), start)[0].x

    return solve_with_trust(quadratic, lambda: batches(spoilt), solver).quadratic


def batches(spoilt: Spoilt) -> list[tuple[slice, np.ndarray]]:
    return [(slice(0, len(spoilt.samples)), spoilt.samples.astype(np.complex64))]


def nearest_protocol(protocol: Protocol, grid: Grid) -> Protocol:
    step = np.array(grid.lattice_step[::-1])
    k = protocol.nuclear_wavevector.copy()
    k[:, :2] = np.rint(k[:, :2] / step) * step
    return replace(protocol, nuclear_wavevector=k)


def pretend(spoilt: Spoilt, apparatus: Instrument) -> dict[str, float]:
    """Error and misfit of the exact ridge solution when the measurement is taken for ideal."""
    grid = Muscle.small().grid
    protocol = nearest_protocol(spoilt.protocol, grid)
    model = ForwardModel.build(grid, apparatus, protocol, BASIS, apparatus.field_noise)
    statistics = accumulate(model, batches(spoilt))
    unit = 1 / statistics.sensitivity()
    quadratic = BlockQuadratic(statistics.scaled(unit))
    x = quadratic.step(Symbol(RIDGE))(quadratic.linear)
    return {
        "error_pretending": relative_error(x * unit[0], in_view(spoilt.truth)),
        "misfit_pretending": quadratic.misfit(x),
    }


def in_view(x: np.ndarray) -> np.ndarray:
    """The part of a wide object above the view."""
    margin = (x.shape[-1] - 64) // 2
    return x[..., margin : margin + 64, margin : margin + 64]


def relative_error(x: np.ndarray, truth: np.ndarray) -> float:
    return float(np.linalg.norm(x - truth) / np.linalg.norm(truth))


def measure(spoilt: Spoilt, apparatus: Instrument) -> dict[str, Any]:
    """All figures of one imperfection."""
    quadratic = scaled_quadratic(spoilt, apparatus)
    symbol = Symbol(RIDGE)
    reference, plain = reference_solution(quadratic, spoilt.samples)
    graded = quadratic.system(symbol)
    mean = System(graded.apply, quadratic.nearest.step(symbol))
    states = [begin(system, quadratic.linear) for system in (graded, mean)]
    (iterations, gap), (mean_iterations, _) = (
        until_close(lambda state=state: advance(state).x, reference)  # type: ignore[misc]
        for state in states
    )
    filling: int | None = None
    if quadratic.operator.model.only_channels:
        update, x = MajorisedStep().step(quadratic, symbol), None

        def fill() -> np.ndarray:
            nonlocal x
            x = update(quadratic.linear, x)
            return x

        filling, _ = until_close(fill, reference)
    unit = quadratic.unit[:, None, None, None]
    return {
        "iterations": iterations,
        "difference": gap,
        "mean_blocks": mean_iterations,
        "filling_in": filling,
        "plain": plain,
        "pass_ms": 1e3 * timed(lambda: quadratic.normal(reference.astype(np.complex64))).seconds,
        "precondition_ms": 1e3 * timed(lambda: graded.precondition(quadratic.linear)).seconds,
        "error": relative_error(in_view(reference * unit), in_view(spoilt.truth)),
        "misfit": quadratic.misfit(reference.astype(np.complex64)),
        **pretend(spoilt, apparatus),
    }


def main() -> None:
    apparatus = instrument()
    results = {}
    for spoilt in spoilt_records(apparatus):
        results[spoilt.name] = measure(spoilt, apparatus)
        print(f"done: {spoilt.name}", file=sys.stderr)
    names = list(next(iter(results.values())))
    table(
        [
            [name, *(f"> {MOST}" if v == MOST + 1 else "–" if v is None else v for v in r.values())]
            for name, r in results.items()
        ],
        ["imperfection", *names],
    )
    worst = max(r["iterations"] for r in results.values())
    emit({"worst_iterations": worst, "cases": results})


if __name__ == "__main__":
    main()
