"""Everything geometric that a record of something unknown tells: gradients, then standoff."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from recon.calibrate.ascent import GeometryFit
from recon.calibrate.compressed import Progress
from recon.calibrate.estimate import Estimate
from recon.calibrate.evidence import standoff_from_record
from recon.calibrate.geometry_parameters import AXIAL, LATERAL, LAYER, WAVE, Quantity, named
from recon.calibrate.gradients_fit import COMPONENTS, gradients_from_record
from recon.errors import InputError
from recon.record import Record


def geometry_from_record(
    record: Record,
    quantities: Sequence[Quantity | str] = LATERAL + LAYER[:1],
    stated: Sequence[Estimate] = (),
    *,
    shots: NDArray[np.integer] | None = None,
    components: int | None = COMPONENTS,
    progress: Progress | None = None,
) -> GeometryFit:
    """Lateral gradients by separable least squares, then the rest by the evidence.

    The lateral entries hardly depend on the rest, which is estimated with them held; the joint
    covariance is taken as that of the two steps apart.

    Parameters
    ----------
    quantities, stated, shots, progress
        As for `gradients_from_record` and `standoff_from_record`.
    components
        Of the time axis, for the gradients; the second step uses all.

    Raises
    ------
    InputError
        As those two; or only one of the two would be needed.
    """
    every = named(one if isinstance(one, str) else one.name for one in quantities)
    lateral = [one for one in every if one.name in WAVE and one not in AXIAL]
    rest = [one for one in every if one not in lateral]
    if not lateral or not rest:
        raise InputError(
            "nothing but one kind of quantity is asked for",
            "calibration",
            "use gradients_from_record or standoff_from_record",
        )
    first = gradients_from_record(
        record, lateral, stated, shots=shots, components=components, progress=progress
    )
    found = first.estimates[: len(first.covariance)]
    held = [*stated, *(replace(one, standard_error=0.0, fixed=True) for one in found)]
    second = standoff_from_record(record, rest, held, shots=shots, progress=progress)
    more = second.estimates[: len(second.covariance)]
    kept = first.estimates[len(found) :]
    return GeometryFit(
        (*found, *more, *kept),
        block_diag(first.covariance, second.covariance),
        (*first.undetermined, *second.undetermined),
        second.misfit,
        first.passes + second.passes,
    )
