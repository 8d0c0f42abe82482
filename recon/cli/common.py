"""What verbs share: a progress line, and small parsers."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager

import click

from recon.spreading import FreeDiffusion, Spreading, StandingMap

EVERY = 0.2
WIDTH = 78


class ProgressLine:
    """One line on standard error that rewrites itself on a terminal and is silent elsewhere."""

    def __init__(self) -> None:
        self._live = sys.stderr.isatty()
        self._last = 0.0
        self._shown = False

    def __call__(self, what: str, share: float | None = None) -> None:
        now = time.monotonic()
        if not self._live or now - self._last < EVERY:
            return
        self._last, self._shown = now, True
        part = "" if share is None else f" {100 * share:3.0f} %"
        click.echo(f"\r{what + part:<{WIDTH}}", err=True, nl=False)

    def counted(self, what: str) -> CountedProgress:
        """A callback (done, total)."""
        return CountedProgress(self, what)

    def clear(self) -> None:
        """Remove the line."""
        if self._shown:
            click.echo(f"\r{'':<{WIDTH}}\r", err=True, nl=False)
            self._shown = False


class CountedProgress:
    """Progress as a count out of a total."""

    def __init__(self, line: ProgressLine, what: str) -> None:
        self._line, self._what = line, what

    def __call__(self, done: int, total: int) -> None:
        self._line(self._what, done / max(total, 1))


@contextmanager
def progress_line() -> Iterator[ProgressLine]:
    """A progress line that is cleared at the end, whatever happens."""
    line = ProgressLine()
    try:
        yield line
    finally:
        line.clear()


SPREADINGS: dict[str, Spreading] = {"free": FreeDiffusion(), "standing": StandingMap()}

diffusion_option = click.option(
    "--diffusion",
    type=click.Choice([*SPREADINGS]),
    default=None,
    help="What molecules do to patterns while they are listened to: carry amount and phase away "
    "(free), or phase only within a map that stays (standing). By default they stand still.",
)
