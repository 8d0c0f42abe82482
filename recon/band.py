"""The band that the samples span, and where each line lies in it: folding and images by name.

Complex samples a dwell time apart span a band 1/dwell wide about the carrier, the Larmor frequency
at the reference shift. A line beyond it comes back inside, folded by whole bandwidths. A quadrature
that is not balanced leaves a weak image of each line on the other side of the carrier. Readouts
are real before they are demodulated: a precession at f appears at its alias under the repetition
rate, upside down in every second zone.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.basis import all_times, species_lines
from recon.errors import InputError, InputWarning
from recon.instrument import Instrument
from recon.protocol import Protocol
from recon.specimen import Species

WEAK = 0.05
"""Lines with less than this share of the strongest line of their species go unnamed."""

ROUGHLY = 1e-3
"""Steps that differ by this share of the shortest are equal."""


@dataclass(frozen=True)
class Alias:
    """Where a real oscillation appears among real samples.

    Attributes
    ----------
    frequency
        Between 0 and half the rate, Hz.
    zone
        Number of half rates below the true frequency.
    """

    frequency: float
    zone: int

    @property
    def reversed(self) -> bool:
        """A higher true frequency appears at a lower alias."""
        return self.zone % 2 == 1


def alias_of(frequency: float, rate: float) -> Alias:
    """The alias of a frequency f ≥ 0, Hz, under sampling at a rate, Hz: |f − m rate|."""
    if not (rate > 0 and frequency >= 0):
        raise InputError(f"frequency {frequency:g} Hz or rate {rate:g} Hz is not positive", "alias")
    return Alias(
        float(abs(frequency - rate * np.round(frequency / rate))), int(2 * frequency / rate)
    )


@dataclass(frozen=True)
class FoldedLine:
    """One line in the band.

    Attributes
    ----------
    species
        Whose line it is.
    shift_ppm
        Its true place.
    offset
        From the carrier, Hz, positive towards higher ppm.
    folds
        Bandwidths taken off to bring it inside; 0 for a line within the band.
    inside
        Offset at which it appears, Hz.
    width
        Full width at half maximum, Hz.
    """

    species: str
    shift_ppm: float
    offset: float
    folds: int
    inside: float
    width: float

    @property
    def image(self) -> float:
        """Offset of its image under unbalanced quadratures, Hz."""
        return -self.inside

    def __str__(self) -> str:
        how = f" folded by {self.folds:+d} band{'s' * (abs(self.folds) > 1)}" if self.folds else ""
        return f"{self.species} at {self.shift_ppm:.2f} ppm{how}"


@dataclass(frozen=True)
class Band:
    """The demodulated band.

    Attributes
    ----------
    larmor_frequency
        Hz at 0 ppm.
    reference_shift_ppm
        Shift of the carrier.
    dwell
        Time between samples, s.
    duration
        From the first sample to the last, s.
    """

    larmor_frequency: float
    reference_shift_ppm: float
    dwell: float
    duration: float

    @classmethod
    def of(cls, instrument: Instrument, protocol: Protocol) -> Band:
        """The band of all times of a table; its dwell is their largest common step.

        Raises
        ------
        InputError
            There is only one time, which makes no spectral axis.
        """
        times = all_times(protocol)
        if len(times) < 2:
            raise InputError("has one sample time, which spans no band", "protocol", "sample more")
        duration = float(times[-1] - times[0])
        step = _common_step(np.diff(times))
        dwell = duration / round(duration / step)
        return cls(instrument.larmor_frequency, protocol.reference_shift_ppm, dwell, duration)

    @property
    def bandwidth(self) -> float:
        """1/dwell, Hz."""
        return 1 / self.dwell

    @property
    def carrier(self) -> float:
        """Frequency in the middle of the band, Hz."""
        return self.larmor_frequency * (1 + 1e-6 * self.reference_shift_ppm)

    @property
    def limits_ppm(self) -> tuple[float, float]:
        """Shifts at the lower and upper end of the band."""
        half = 0.5e6 * self.bandwidth / self.larmor_frequency
        return self.reference_shift_ppm - half, self.reference_shift_ppm + half

    def folded(self, offset: float) -> tuple[float, int]:
        """Where an offset from the carrier appears, within ± bandwidth/2, and its folds."""
        folds = int(np.floor(offset * self.dwell + 0.5))
        return offset - folds * self.bandwidth, folds

    def distance(self, one: float, other: float) -> float:
        """Between two offsets as they appear, around the ends of the band, Hz."""
        return abs(self.folded(one - other)[0])

    def lines(self, species: Sequence[Species], instrument: Instrument) -> list[FoldedLine]:
        """The lines of all species, strong ones only, in the order of the species."""
        found = []
        for one in species:
            lines = species_lines(one, instrument, self.reference_shift_ppm)
            strong = lines.intensities >= WEAK * lines.intensities.max()
            for offset, rate in zip(
                lines.frequencies[strong], lines.decay_rates[strong], strict=True
            ):
                inside, folds = self.folded(float(offset))
                shift = self.reference_shift_ppm + 1e6 * float(offset) / self.larmor_frequency
                found.append(
                    FoldedLine(one.name, shift, float(offset), folds, inside, float(rate) / np.pi)
                )
        return found

    def collisions(self, lines: Sequence[FoldedLine]) -> list[tuple[FoldedLine, FoldedLine]]:
        """Lines of different species that appear on each other only because they fold.

        On each other: closer than their mean width or the resolution 1/duration. The closest pair
        of every two species.
        """
        closest: dict[tuple[str, str], tuple[float, FoldedLine, FoldedLine]] = {}
        for place, one in enumerate(lines):
            for other in lines[place + 1 :]:
                if one.species == other.species or one.folds == other.folds:
                    continue
                apart = self.distance(one.inside, other.inside)
                if apart >= max((one.width + other.width) / 2, 1 / self.duration):
                    continue
                pair = (one.species, other.species)
                if pair not in closest or apart < closest[pair][0]:
                    closest[pair] = (apart, one, other)
        return [(one, other) for _, one, other in closest.values()]


def warn_of_folds(species: Sequence[Species], instrument: Instrument, protocol: Protocol) -> None:
    """Name the lines that a dwell time folds onto each other."""
    if len(all_times(protocol)) < 2:
        return
    band = Band.of(instrument, protocol)
    pairs = band.collisions(band.lines(species, instrument))
    if pairs:
        named = "; ".join(f"{one} and {other}" for one, other in pairs)
        warnings.warn(
            f"a dwell time of {band.dwell * 1e3:g} ms spans {band.bandwidth:g} Hz and folds lines "
            f"onto each other: {named}; shorten it or move reference_shift_ppm",
            InputWarning,
            stacklevel=4,
        )


def _common_step(steps: NDArray[np.floating]) -> float:
    """The largest step of which all are multiples, by Euclid's algorithm on rounded lengths."""
    least = float(steps.min())
    common = least
    for step in steps:
        longer, shorter = float(step), common
        while shorter > ROUGHLY * least:
            longer, shorter = shorter, abs(longer - shorter * round(longer / shorter))
        common = longer
    return common
