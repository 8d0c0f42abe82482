"""What the benchmarks share: fair timing, tables, and the JSON line.

Ratios are measured side by side in one run: the candidates take turns, so that a machine that
slows down slows all of them.
"""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

ROOT = Path(__file__).parent.parent
sys.path.insert(0, str(ROOT))  # the tests' small instruments


@dataclass(frozen=True)
class Timing:
    """Median seconds and its standard error."""

    seconds: float
    error: float

    def over(self, other: Timing) -> tuple[float, float]:
        """Ratio of two timings and its standard error."""
        ratio = self.seconds / other.seconds
        relative = np.hypot(self.error / self.seconds, other.error / other.seconds)
        return ratio, ratio * float(relative)

    def __str__(self) -> str:
        return f"{1e3 * self.seconds:.3g} ± {1e3 * self.error:.1g} ms"


def side_by_side(
    candidates: Mapping[str, Callable[[], Any]], repeats: int = 11, warm: int = 1
) -> dict[str, Timing]:
    """Time candidates in turns; the median of the repeats and the median's standard error."""
    for _ in range(warm):
        for run in candidates.values():
            run()
    seconds: dict[str, list[float]] = {name: [] for name in candidates}
    for _ in range(repeats):
        for name, run in candidates.items():
            begin = time.perf_counter()
            run()
            seconds[name].append(time.perf_counter() - begin)
    return {name: _timing(values) for name, values in seconds.items()}


def timed(run: Callable[[], Any], repeats: int = 5, warm: int = 1) -> Timing:
    """Median time of one candidate."""
    return side_by_side({"": run}, repeats, warm)[""]


def _timing(values: Sequence[float]) -> Timing:
    spread = float(np.median(np.abs(np.asarray(values) - np.median(values))))
    error = 1.2533 * 1.4826 * spread / np.sqrt(len(values))
    return Timing(float(np.median(values)), error)


def table(rows: Sequence[Sequence[object]], header: Sequence[str]) -> None:
    """Print columns of equal width."""
    texts = [list(map(_text, header)), *(list(map(_text, row)) for row in rows)]
    widths = [max(len(row[i]) for row in texts) for i in range(len(header))]
    for row in texts:
        print(
            "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip()
        )


def emit(figures: Mapping[str, Any]) -> None:
    """The JSON line, last on standard output."""
    print(json.dumps({key: _plain(value) for key, value in figures.items()}))


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    if isinstance(value, float | np.floating):
        return float(f"{float(value):.4g}")
    return value.item() if isinstance(value, np.generic) else value


def _text(value: object) -> str:
    return f"{value:.4g}" if isinstance(value, float | np.floating) else str(value)
