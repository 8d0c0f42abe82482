"""What a person fixes, so that it is not estimated: a small TOML file, units in the names."""
# ruff: noqa: N815 (unit symbols in field names keep their case)

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from recon.toml import Description, Number


class Fixed(Description):
    """Given values; None is estimated where an estimator runs.

    Attributes
    ----------
    field_offset_Hz
        Frequency of all shots relative to the description.
    polarisation_lost_percent
        Share of the polarisation lost between the first and the last shot.
    """

    field_offset_Hz: Number | None = None
    polarisation_lost_percent: Annotated[Number, Field(ge=0, lt=100)] | None = None
