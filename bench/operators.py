"""Forward operator, adjoint and one-pass accumulation against the work they cannot avoid.

    python bench/operators.py --json

The bare work of A x: one FFT of the object, and per shot the multiply-adds of the kernel with the
object's spectrum and one inverse FFT of the field. Of the adjoint: the same backwards. Of the
pass: one FFT of every image of the record. All in complex64, scipy.fft, one thread.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import scipy.fft
from common import ROOT, emit, side_by_side, table
from scene import experiment, random_complex

from recon.forward import ForwardOperator, accumulate

SIZES = {"64x64x6, 338 shots": ((6, 64, 64), 338), "128x128x8, 512 shots": ((8, 128, 128), 512)}


def bare_forward(spectrum: np.ndarray, kernel: np.ndarray, x: np.ndarray, shots: int) -> None:
    """The unavoidable work of A x."""
    scipy.fft.fft2(x)
    work = np.empty_like(x)
    for _ in range(shots):
        np.multiply(spectrum, kernel, out=work)
        scipy.fft.ifft2(work.sum(axis=1), overwrite_x=True)


def bare_adjoint(total: np.ndarray, kernel: np.ndarray, y: np.ndarray) -> None:
    """The unavoidable work of Aᴴ y."""
    work = np.empty(total.shape, np.complex64)
    for image in y:
        np.multiply(scipy.fft.fft2(image)[:, None], kernel, out=work)
        total += work
    scipy.fft.ifft2(total)


def bare_pass(y: np.ndarray) -> None:
    """One FFT of every image."""
    for shot in y:
        scipy.fft.fft2(shot)


def ratios(shape: tuple[int, int, int], shots: int, times: int = 32) -> list[tuple[float, float]]:
    """Forward, adjoint and pass over bare work, each with its error."""
    model, _ = experiment(shape, shots)
    operator = ForwardOperator(model)
    x, y = random_complex(operator.object_shape), random_complex(operator.sample_shape, 1)
    kernel = model.kernel(0, 0.0).astype(np.complex64)
    spectrum = scipy.fft.fft2(x)
    total = np.zeros_like(x)
    basis = np.exp(-np.outer(np.arange(times), [0.1 + 0.3j, 0.2 - 0.4j]))
    many, _ = experiment(shape, shots // 16, basis)
    record = random_complex((len(many.encoding), times, *many.channels), 2)
    batches = [(slice(0, len(record)), record)]
    found = side_by_side(
        {
            "forward": lambda: operator.apply(x),
            "bare forward": lambda: bare_forward(spectrum, kernel, x, shots),
            "adjoint": lambda: operator.adjoint(y),
            "bare adjoint": lambda: bare_adjoint(total, kernel, y),
            "pass": lambda: accumulate(many, batches),
            "bare pass": lambda: bare_pass(record),
        },
        repeats=7,
    )
    for name, timing in found.items():
        print(f"    {name:<14} {timing}")
    return [found[name].over(found[f"bare {name}"]) for name in ("forward", "adjoint", "pass")]


def streamed_peak(megabytes: int = 1050) -> float:
    """Peak memory of the pass over a record streamed from its file, over the record's size."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "record.h5"
        environment = os.environ | {"PYTHONPATH": f"{ROOT}"}
        for task in ("write", "pass"):
            command = [sys.executable, __file__, task, str(path), str(megabytes)]
            done = subprocess.run(command, capture_output=True, text=True, env=environment)
            if done.returncode:
                raise RuntimeError(done.stderr)
        idle, peak = map(float, done.stdout.split())
        size = path.stat().st_size
    print(f"    record {size / 1e6:.0f} MB, idle {idle / 1e6:.0f} MB, peak {peak / 1e6:.0f} MB")
    return (peak - idle) / size


def subtask(task: str, path: Path, megabytes: int) -> None:
    """Run in a process of its own, so that its peak memory is its own."""
    from recon.reconstruct import read_statistics
    from recon.record import Record, RecordWriter
    from recon.unknown import SpeciesAmounts

    if task == "write":
        from recon.demo import SAMPLES, Muscle, instrument, protocol

        specimen = Muscle.small().specimen((1, 1, 1))
        shots = megabytes * 1_000_000 // (SAMPLES * 64 * 64 * 8)
        once = protocol(specimen)
        many = once.subset(np.resize(np.arange(len(once)), shots))
        apparatus = instrument()
        description = specimen.description_json()
        with RecordWriter(path, apparatus, many, description, apparatus.field_noise) as writer:
            for shot in range(shots):
                writer.append(random_complex((1, SAMPLES, 64, 64), shot))
        return
    record = Record.open(path)
    Path("/proc/self/clear_refs").write_text("5")  # the peak counts from here
    idle = resident("VmRSS")
    read_statistics(record, SpeciesAmounts())
    print(idle, resident("VmHWM"))


def resident(field: str) -> int:
    """Bytes of memory held now (VmRSS) or at most (VmHWM), from the kernel."""
    status = Path("/proc/self/status").read_text()
    return 1024 * int(status.split(f"{field}:")[1].split()[0])


def main() -> None:
    if len(sys.argv) > 2 and sys.argv[1] in ("write", "pass"):
        subtask(sys.argv[1], Path(sys.argv[2]), int(sys.argv[3]))
        return
    rows, worst = [], np.zeros(3)
    for name, (shape, shots) in SIZES.items():
        print(name)
        found = ratios(shape, shots)
        rows.append([name, *(f"{ratio:.2f} ± {error:.2f}" for ratio, error in found)])
        worst = np.maximum(worst, [ratio for ratio, _ in found])
    peak = streamed_peak()
    table(rows, ["size", "forward / bare", "adjoint / bare", "pass / bare"])
    emit(
        {
            "forward_over_fft": worst[0],
            "adjoint_over_fft": worst[1],
            "pass_over_fft": worst[2],
            "peak_over_record": peak,
        }
    )


if __name__ == "__main__":
    main()
