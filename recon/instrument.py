"""What the apparatus is: sensor layer, bias field, optics, detector, gradients, readout.

An instrument is a TOML file whose field names carry their units:

    temperature_C = 25.0
    bias_field_mT = [0.0, 0.0, 85.0]

    [sensor_layer]
    depth_um = 0.1
    thickness_um = 5.0
    crystal_cut = "111"

    [optics]
    numerical_aperture = 0.8
    wavelength_nm = 700.0

    [camera]
    pixel_um = 4.0
    field_of_view_um = [256.0, 256.0]

    [gradients]
    nuclear_strength_mT_per_m = 2000.0
    nuclear_pulse_max_ms = 2.0
    sensor_strength_mT_per_m = 2000.0
    sensor_pulse_max_us = 5.0

    [readout]
    photons_per_readout = 1e6
    contrast = 0.02
    sensing_time_us = 20.0
    efficiency = 0.5
    readouts_per_sample = 100

`[one_detector]` with `field_of_view_um` takes the place of `[camera]` when there is no camera.
Properties are SI and lie in the frame of `recon.grid`.
"""
# ruff: noqa: N815 (unit symbols in field names keep their case)

from __future__ import annotations

import warnings
from typing import Annotated, Literal, Self

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, ValidationInfo, field_validator, model_validator

from recon.errors import InputError, InputWarning
from recon.physics import magnetisation, photons
from recon.toml import Count, Description, Number

Vector = NDArray[np.float64]
Positive = Annotated[Number, Field(gt=0)]
NotNegative = Annotated[Number, Field(ge=0)]
Fraction = Annotated[Number, Field(gt=0, le=1)]

PROTON_HZ_PER_T: float = magnetisation.larmor_frequency(1.0)
ELECTRON_HZ_PER_T: float = photons.ELECTRON_FREQUENCY_PER_TESLA
ZERO_FIELD_SPLITTING_HZ = 2.870e9
"""Ground-state splitting of the NV centre at room temperature (Doherty et al. 2013)."""
ANTICROSSING_T = ZERO_FIELD_SPLITTING_HZ / ELECTRON_HZ_PER_T
"""Field along a sensing axis at which two ground-state levels meet: 102.4 mT."""
ANTICROSSING_MARGIN = 0.01
ANTICROSSING_CONE_DEG = 10.0

CRYSTAL_AXES: Vector = np.array([[1, 1, 1], [-1, -1, 1], [-1, 1, -1], [1, -1, -1]]) / np.sqrt(3)
"""The four bond directions in the crystal frame, pairwise at 109.47°."""

_FACE_FRAMES = {
    "100": np.array([[1, 0, 0], [0, 1, 0], [0, 0, 1]]),
    "111": np.array([[-1, -1, 2], [1, -1, 0], [1, 1, 1]]),
    "110": np.array([[0, 0, 1], [1, -1, 0], [1, 1, 0]]),
}
"""Crystal directions of the laboratory x, y, z for each cut at zero in-plane rotation."""


class SensorLayer(Description):
    """The layer of sensor spins: `depth_um` below the face to `depth_um + thickness_um`.

    Sensing axes for each cut, before turning by `in_plane_rotation_deg` from x towards y:

    - "100": x, y, z along the cube edges; all four axes at 54.7° to z.
    - "111": axis 1 along z; axis 2 in the x–z plane; axes 2 to 4 at 109.5° to z.
    - "110": x along [001]; axes 1 and 2 at 35.3° to z, axes 3 and 4 in the face.
    """

    depth_um: NotNegative
    thickness_um: Positive
    crystal_cut: Literal["100", "111", "110"]
    in_plane_rotation_deg: Number = 0.0


class Optics(Description):
    """The fluorescence optics: the aperture must be below the immersion's refractive index."""

    numerical_aperture: Positive
    wavelength_nm: Positive
    refractive_index: Annotated[Number, Field(ge=1)] = 1.0

    @model_validator(mode="after")
    def _aperture_below_index(self) -> Self:
        if not self.numerical_aperture < self.refractive_index:
            raise ValueError(
                f"numerical_aperture {self.numerical_aperture:g} must be below "
                f"refractive_index {self.refractive_index:g}"
            )
        return self

    @property
    def wavelength(self) -> float:
        """Fluorescence wavelength in vacuum, metres."""
        return self.wavelength_nm / 1e9


class Camera(Description):
    """A camera in the object plane: one channel per pixel over the field of view (x, y)."""

    pixel_um: Positive
    field_of_view_um: tuple[Positive, Positive]

    @model_validator(mode="after")
    def _whole_pixels(self) -> Self:
        for extent in self.field_of_view_um:
            count = extent / self.pixel_um
            if round(count) < 1 or abs(count - round(count)) > 1e-6 * count:
                raise ValueError(
                    f"field_of_view_um {extent:g} is not a whole number of pixels "
                    f"of {self.pixel_um:g} um"
                )
        return self

    def channels(self) -> tuple[int, int]:
        """Number of channels (ny, nx)."""
        x, y = self.field_of_view_um
        return round(y / self.pixel_um), round(x / self.pixel_um)

    @property
    def pixel(self) -> tuple[float, float]:
        """Pixel edges (y, x), metres."""
        return self.pixel_um / 1e6, self.pixel_um / 1e6


class OneDetector(Description):
    """One detector that measures the mean over its field of view (x, y)."""

    field_of_view_um: tuple[Positive, Positive]

    def channels(self) -> tuple[int, int]:
        """One channel: (1, 1)."""
        return 1, 1

    @property
    def pixel(self) -> tuple[float, float]:
        """The one channel's edges (y, x), metres: the whole view."""
        x, y = self.field_of_view_um
        return y / 1e6, x / 1e6


class Gradients(Description):
    """Pulsed gradients: strengths per component (x, y, z), or one number for all of them.

    The largest wavevector is 2π γ G τ, with γ in Hz/T of the proton for the nuclei and of the
    electron for the sensor spins.
    """

    nuclear_strength_mT_per_m: tuple[NotNegative, NotNegative, NotNegative] = (0.0, 0.0, 0.0)
    nuclear_pulse_max_ms: NotNegative = 0.0
    sensor_strength_mT_per_m: tuple[NotNegative, NotNegative] = (0.0, 0.0)
    sensor_pulse_max_us: NotNegative = 0.0

    @field_validator("nuclear_strength_mT_per_m", "sensor_strength_mT_per_m", mode="before")
    @classmethod
    def _one_for_all(cls, value: object, info: ValidationInfo) -> object:
        if isinstance(value, int | float):
            return (value,) * (3 if info.field_name == "nuclear_strength_mT_per_m" else 2)
        return value

    @property
    def nuclear_wavevector_limit(self) -> Vector:
        """Largest |kx|, |ky|, |kz| on the nuclei, (3,), rad/m."""
        strength = np.array(self.nuclear_strength_mT_per_m) / 1e3
        return 2 * np.pi * PROTON_HZ_PER_T * strength * (self.nuclear_pulse_max_ms / 1e3)

    @property
    def sensor_wavevector_limit(self) -> Vector:
        """Largest |qx|, |qy| on the sensor spins, (2,), rad/m."""
        strength = np.array(self.sensor_strength_mT_per_m) / 1e3
        return 2 * np.pi * ELECTRON_HZ_PER_T * strength * (self.sensor_pulse_max_us / 1e6)


class Readout(Description):
    """The optical readout of one channel.

    `photons_per_readout` is the mean count of one channel in one readout in the bright state;
    `efficiency` is the slope relative to an ideal sequence. A complex sample takes
    `readouts_per_sample` readouts for each of its two quadratures.
    """

    photons_per_readout: Positive
    contrast: Fraction
    sensing_time_us: Positive
    efficiency: Fraction
    readouts_per_sample: Annotated[Count, Field(ge=1)] = 1

    @property
    def sensing_time(self) -> float:
        """Duration of one sensing sequence, seconds."""
        return self.sensing_time_us / 1e6


class Instrument(Description):
    """The apparatus. Warns (`InputWarning`) when the bias field sits on the level anticrossing."""

    temperature_C: Annotated[Number, Field(gt=-273.15)]
    bias_field_mT: tuple[Number, Number, Number]
    sensor_layer: SensorLayer
    optics: Optics
    camera: Camera | None = None
    one_detector: OneDetector | None = None
    gradients: Gradients = Gradients()
    readout: Readout

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if (self.camera is None) == (self.one_detector is None):
            raise ValueError("give exactly one of the sections [camera] and [one_detector]")
        if not any(self.bias_field_mT):
            raise ValueError("bias_field_mT must not be zero")
        self._warn_of_anticrossing()
        return self

    def _warn_of_anticrossing(self) -> None:
        along = np.abs(self.sensing_directions @ self.bias_field)
        strength = float(np.linalg.norm(self.bias_field))
        near = np.abs(along - ANTICROSSING_T) <= ANTICROSSING_MARGIN * ANTICROSSING_T
        aligned = along >= np.cos(np.radians(ANTICROSSING_CONE_DEG)) * strength
        for axis in np.flatnonzero(near & aligned) + 1:
            warnings.warn(
                f"bias_field_mT: {along[axis - 1] * 1e3:.1f} mT along sensing axis {axis} is "
                f"within {ANTICROSSING_MARGIN:.0%} of the ground-state level anticrossing at "
                f"{ANTICROSSING_T * 1e3:.1f} mT; choose another field",
                InputWarning,
                stacklevel=2,
            )

    @property
    def detector(self) -> Camera | OneDetector:
        """The camera or the one detector, whichever there is."""
        detector = self.camera or self.one_detector
        assert detector is not None
        return detector

    @property
    def temperature(self) -> float:
        """Temperature of the sample, kelvin."""
        return self.temperature_C + 273.15

    @property
    def bias_field(self) -> Vector:
        """Bias field (x, y, z), tesla."""
        return np.array(self.bias_field_mT) / 1e3

    @property
    def bias_direction(self) -> Vector:
        """Unit vector along the bias field, (3,)."""
        return self.bias_field / np.linalg.norm(self.bias_field)

    @property
    def larmor_frequency(self) -> float:
        """Proton Larmor frequency γ|B|, Hz, of the bare proton (CODATA)."""
        return PROTON_HZ_PER_T * float(np.linalg.norm(self.bias_field))

    @property
    def depth(self) -> float:
        """Depth of the top of the sensor layer below the face, metres."""
        return self.sensor_layer.depth_um / 1e6

    @property
    def thickness(self) -> float:
        """Thickness of the sensor layer, metres."""
        return self.sensor_layer.thickness_um / 1e6

    @property
    def sensing_directions(self) -> Vector:
        """Unit vectors of sensing axes 1 to 4 in the laboratory frame, (4, 3)."""
        frame = _FACE_FRAMES[self.sensor_layer.crystal_cut]
        frame = frame / np.linalg.norm(frame, axis=1, keepdims=True)
        angle = np.radians(self.sensor_layer.in_plane_rotation_deg)
        cosine, sine = np.cos(angle), np.sin(angle)
        turn = np.array([[cosine, -sine, 0], [sine, cosine, 0], [0, 0, 1]])
        return np.asarray(CRYSTAL_AXES @ frame.T @ turn.T)

    def sensing_direction(self, axis: int) -> Vector:
        """Unit vector of one sensing axis, numbered 1 to 4, (3,).

        Raises
        ------
        InputError
            There is no such axis.
        """
        if axis not in (1, 2, 3, 4):
            raise InputError(f"sensing axis {axis} does not exist", mend="use 1, 2, 3 or 4")
        return np.asarray(self.sensing_directions[axis - 1])

    @property
    def pixel(self) -> tuple[float, float]:
        """Edges (y, x) of one channel in the object plane, metres."""
        return self.detector.pixel

    @property
    def view(self) -> tuple[float, float]:
        """Extent (y, x) of the field of view, metres."""
        x, y = self.detector.field_of_view_um
        return y / 1e6, x / 1e6

    @property
    def nuclear_wavevector_limit(self) -> Vector:
        """Largest |kx|, |ky|, |kz| on the nuclei, (3,), rad/m."""
        return self.gradients.nuclear_wavevector_limit

    @property
    def sensor_wavevector_limit(self) -> Vector:
        """Largest |qx|, |qy| on the sensor spins, (2,), rad/m."""
        return self.gradients.sensor_wavevector_limit

    @property
    def field_noise(self) -> float:
        """Standard deviation of one complex sample at one average, tesla: σ² = E|noise|²."""
        readout = self.readout
        quadrature = photons.field_noise(
            readout.photons_per_readout,
            readout.contrast,
            readout.sensing_time,
            readout.efficiency,
        )
        return float(quadrature * np.sqrt(2 / readout.readouts_per_sample))
