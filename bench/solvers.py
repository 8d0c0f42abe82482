"""Time to a relative objective gap of 1e-3, ours against the stock solvers of two libraries.

    python bench/solvers.py --case muscle64 --json

Ours counts everything from the record in memory: the model's tables, b, blocks, factorisation,
solve. A peer counts its solve alone: its operator is composed beforehand, its step size given. All
minimise the same objective in complex64 on one thread; a peer that has used up the best peer's
time is stopped. Writes what happened to bench/.records for figures.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import json
import time
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import numpy as np
from common import emit, table, timed
from judge import GOAL, Judge, OutOfTime, Reached, Trace
from pieces import Pieces
from solver_cases import CASES, RECORDS, Case

from recon.solvers import ADMM, Problem, Stopping, solve

BUDGET = 60.0
MOST = 2000


def ours(case: Case, judge: Judge, repeats: int) -> dict[str, Any]:
    """Iterations needed, then the whole chain timed from the record in memory."""
    samples = case.samples
    problem = case.problem(samples)
    method = ADMM()
    trace = Trace(judge, np.inf)
    state = method.start(problem, None)
    try:
        while len(trace.gaps) < MOST:
            state = method.advance(problem, state)
            trace.look(method.estimate(problem, state))
        print(f"    ours did not reach the goal: gap {trace.gaps[-1]:.2g}")
    except Reached:
        pass
    count = len(trace.gaps)

    def chain() -> np.ndarray:
        return solve(case.problem(samples), method, Stopping(0.0, limit=count)).x

    timing = timed(chain, repeats)
    setting_up = timed(lambda: case.problem(samples), repeats)
    x = chain()
    return {"timing": timing, "set-up": setting_up, "iterations": count, "x": x, "trace": trace}


def peers(runs: Iterable[Any], judge: Judge, budget: float) -> list[dict[str, Any]]:
    """Each peer's time to the goal, or that it was slower than the budget or the best so far."""
    found: list[dict[str, Any]] = []
    for name, run, off in runs:
        assert off < 1e-4, f"{name} solves something else: {off}"
        trace = Trace(judge, budget)
        outcome = "ended"
        begin = time.perf_counter()
        try:
            run(trace)
        except Reached:
            outcome = "reached"
            budget = min(budget, 1.2 * trace.seconds[-1])
        except OutOfTime:
            outcome = "stopped"
        print(
            f"    {name}: {outcome}, {len(trace.gaps)} iterations, gap {trace.gaps[-1]:.2g}, "
            f"{trace.seconds[-1]:.2f} s (clock {time.perf_counter() - begin:.0f} s)",
            flush=True,
        )
        found.append(
            {"name": name, "outcome": outcome, "seconds": trace.seconds[-1], "trace": trace}
        )
    return found


def best(found: list[dict[str, Any]]) -> dict[str, Any]:
    """The fastest that reached the goal; if none did, the lower bound of the time spent."""
    reached = [one for one in found if one["outcome"] == "reached"]
    return min(reached or found, key=lambda one: one["seconds"])


def run_case(case: Case, repeats: int) -> dict[str, Any]:
    problem = case.problem(case.samples)
    begin = time.perf_counter()
    exact = case.dead is None
    assert isinstance(case.record.source, Path)
    keep = case.record.source.with_suffix(f".{case.weight:g}.npy")
    judge = Judge.of(problem, keep) if exact else Judge.of(problem, keep, 1e-5, 150)
    print(
        f"reference optimum {judge.optimum:.8g} in {time.perf_counter() - begin:.0f} s, "
        f"optimality conditions met to {judge.optimality():.1g} λ"
    )
    mine = ours(case, judge, repeats)
    (part,) = problem.terms
    unit = part_unit(case, problem)
    pieces = Pieces(case, unit)
    threshold = np.full(pieces.shape, part.weight, np.float32)
    ny, nx = part.term._coarse(threshold)
    threshold[..., :ny, :nx] = 0
    import peers_pylops
    import peers_sigpy

    common = (pieces, part.term, threshold, problem.quadratic.largest)
    found = peers(peers_sigpy.runs(*common), judge, BUDGET)
    budget = min([BUDGET, *(1.2 * one["seconds"] for one in found if one["outcome"] == "reached")])
    found += peers(peers_pylops.runs(*common), judge, budget)
    helped = peers(peers_sigpy.runs_with_blocks(*common), judge, BUDGET) if exact else []
    return report(case, mine, found, helped, unit, judge)


def part_unit(case: Case, problem: Problem) -> np.ndarray:
    unit = getattr(problem.quadratic, "unit", None)
    return case.unit if unit is None else np.asarray(unit)


def report(
    case: Case,
    mine: dict[str, Any],
    found: list[dict[str, Any]],
    helped: list[dict[str, Any]],
    unit: np.ndarray,
    judge: Judge,
) -> dict[str, Any]:
    seconds = mine["timing"].seconds
    truth = case.truth / unit[:, None, None, None]

    def error(x: np.ndarray) -> float:
        return float(np.linalg.norm(x.reshape(truth.shape) - truth) / np.linalg.norm(truth))

    rows = [["ours", mine["iterations"], f"{seconds:.3f}", "1", "reached"]]
    for one in found + helped:
        ratio = one["seconds"] / seconds
        rows.append(
            [
                one["name"],
                len(one["trace"].gaps),
                f"{one['seconds']:.3f}",
                f"{ratio:.1f}",
                one["outcome"],
            ]
        )
    table(rows, ["solver", "iterations", "seconds", "ratio", "outcome"])
    print(f"ours {mine['timing']}, of which record to blocks {mine['set-up']}")
    winner = best(found)
    print(f"best peer: {winner['name']}")
    figures: dict[str, Any] = {
        "case": case.name,
        "speedup_best_peer": winner["seconds"] / seconds,
        "best_peer": winner["name"],
    }
    if helped:
        figures["speedup_best_peer_with_blocks"] = best(helped)["seconds"] / seconds
    figures |= {
        "gap": judge.gap(mine["x"]),
        "nrmse_ours": error(mine["x"]),
        "nrmse_peer": error(winner["trace"].x),
        "nrmse_optimum": error(judge.reference),
        "iterations": mine["iterations"],
        "seconds": seconds,
    }
    traces = {one["name"]: [one["trace"].seconds, one["trace"].gaps] for one in found + helped}
    (RECORDS / f"{case.name}-traces.json").write_text(json.dumps(traces))
    return figures


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--case", choices=CASES, default="muscle64")
    parser.add_argument("--json", action="store_true", help="accepted for uniformity")
    parser.add_argument("--repeats", type=int, default=7)
    given = parser.parse_args()
    print(f"{given.case}: goal {GOAL:g}")
    emit(run_case(CASES[given.case](), given.repeats))


if __name__ == "__main__":
    main()
