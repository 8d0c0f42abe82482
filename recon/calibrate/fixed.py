"""What a person fixes, so that it is not estimated: a small TOML file, units in the names."""
# ruff: noqa: N815 (unit symbols in field names keep their case)

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from recon.calibrate.estimate import Estimate
from recon.calibrate.geometry_parameters import named
from recon.toml import Description, Number


class Fixed(Description):
    """Given values; None is estimated where an estimator runs.

    Attributes
    ----------
    field_offset_Hz
        Frequency of all shots relative to the description.
    polarisation_lost_percent
        Share of the polarisation lost between the first and the last shot.
    geometry
        Quantities of `recon.calibrate.geometry_parameters` by name, such as depth_um.
    """

    field_offset_Hz: Number | None = None
    polarisation_lost_percent: Annotated[Number, Field(ge=0, lt=100)] | None = None
    geometry: dict[str, Number] = Field(default_factory=dict)

    @property
    def stated(self) -> tuple[Estimate, ...]:
        """The geometry as estimates that are fixed.

        Raises
        ------
        InputError
            There is no such quantity.
        """
        return tuple(
            Estimate(one.name, one.unit, self.geometry[one.name], 0.0, fixed=True)
            for one in named(self.geometry)
        )
