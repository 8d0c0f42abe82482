"""The geometry of the apparatus as a list of numbers, and the descriptions that follow from them.

    k_true = M (k − 2π γ_p G δ sign k),   q_true = S (q − 2π γ_e G' δ' sign q)

M (3 × 3) and S (2 × 2) are what the gradients really wind, in the frame of the camera's pixels; δ
are the delays that switching costs a pulse of fixed strength, per axis; depth and thickness are
the sensor layer's; the bias field is turned by two tilts towards the unit vectors e1 and e2 of
`recon.physics.dipole.precession_frame`; scale and phase multiply every shot's amplitude.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from difflib import get_close_matches

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from recon.calibrate.estimate import Estimate
from recon.errors import InputError
from recon.forward.off_lattice import calibrated
from recon.instrument import ELECTRON_HZ_PER_T, PROTON_HZ_PER_T, Instrument
from recon.physics.dipole import magnetisation_direction, precession_frame
from recon.protocol import Protocol

FloatArray = NDArray[np.floating]
Values = Mapping[str, float]


@dataclass(frozen=True)
class Quantity:
    """One number of the geometry.

    Attributes
    ----------
    name, unit
        As in `Estimate`.
    nominal
        Where the descriptions hold it already the value is theirs, and this is None.
    step
        First half step of a central difference; 0 where the derivative is taken another way.
    reach
        Standard deviation above which a record is said not to tell the quantity.
    least
        Smallest value that makes sense.
    """

    name: str
    unit: str
    nominal: float | None
    step: float
    reach: float
    least: float = -np.inf


def _matrix(name: str, axes: str) -> tuple[Quantity, ...]:
    pairs = [(row, column) for row in axes for column in axes]
    return tuple(
        Quantity(f"{name}_matrix_{row}{column}", "1", float(row == column), 5e-4, 0.2)
        for row, column in pairs
    )


LAYER = (
    Quantity("depth_um", "um", None, 0.02, 2.0, 0.0),
    Quantity("thickness_um", "um", None, 0.05, 2.0, 0.01),
)
BIAS = tuple(Quantity(f"bias_tilt_{n}_deg", "deg", 0.0, 0.3, 20.0) for n in (1, 2))
NUCLEAR_MATRIX = _matrix("nuclear", "xyz")
SENSOR_MATRIX = _matrix("sensor", "xy")
NUCLEAR_DELAY = tuple(Quantity(f"nuclear_delay_{a}_us", "us", 0.0, 1.0, 200.0) for a in "xyz")
SENSOR_DELAY = tuple(Quantity(f"sensor_delay_{a}_us", "us", 0.0, 0.0, 1.0) for a in "xy")
SIGNAL = (
    Quantity("signal_scale", "1", 1.0, 0.0, 1.0, 0.0),
    Quantity("signal_phase_deg", "deg", 0.0, 0.0, 90.0),
)
GRADIENTS = NUCLEAR_MATRIX + NUCLEAR_DELAY + SENSOR_MATRIX + SENSOR_DELAY
EVERY = {one.name: one for one in LAYER + BIAS + GRADIENTS + SIGNAL}
AXIAL = tuple(one for one in NUCLEAR_MATRIX if "z" in one.name[-2:]) + NUCLEAR_DELAY[2:]
"""What changes k_z, or comes of it."""
LATERAL = tuple(one for one in NUCLEAR_MATRIX if one not in AXIAL)
WAVE = frozenset(one.name for one in GRADIENTS)
"""Quantities that act through the wavevectors alone."""


def named(names: Iterable[str]) -> tuple[Quantity, ...]:
    """Quantities by name.

    Raises
    ------
    InputError
        There is no such quantity; names the nearest.
    """
    found = []
    for name in names:
        if name not in EVERY:
            near = get_close_matches(name, EVERY, 1, 0.3)
            mend = f"did you mean '{near[0]}'" if near else f"use one of {', '.join(EVERY)}"
            raise InputError(f"there is no quantity '{name}'", "calibration", mend)
        found.append(EVERY[name])
    return tuple(found)


def nominal_values(instrument: Instrument) -> dict[str, float]:
    """Every quantity as the descriptions have it."""
    layer = instrument.sensor_layer
    held = {"depth_um": layer.depth_um, "thickness_um": layer.thickness_um}
    return {name: held[name] if one.nominal is None else one.nominal for name, one in EVERY.items()}


def with_geometry(
    instrument: Instrument, protocol: Protocol, estimates: Sequence[Estimate]
) -> tuple[Instrument, Protocol]:
    """The descriptions with estimated and stated geometry carried in.

    Quantities that are not listed stay as they are.

    Parameters
    ----------
    estimates
        Of quantities of this module, in any order; standard errors are not looked at.

    Raises
    ------
    InputError
        A quantity is unknown, listed twice, or has a value that makes no sense.
    """
    names = [one.name for one in estimates]
    named(names)
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"'{name}' is given twice", "calibration", "give it once")
    return described(instrument, protocol, {one.name: one.value for one in estimates})


def described(
    instrument: Instrument, protocol: Protocol, values: Values
) -> tuple[Instrument, Protocol]:
    """`with_geometry` for plain values by name."""
    for name, value in values.items():
        if not (np.isfinite(value) and value >= EVERY[name].least):
            raise InputError(
                f"{name} of {value:g} makes no sense", "calibration", "state another value"
            )
    return _instrument(instrument, values), _protocol(instrument, protocol, values)


def _instrument(instrument: Instrument, values: Values) -> Instrument:
    changes: dict[str, object] = {}
    layer = {name: values[name] for name in ("depth_um", "thickness_um") if name in values}
    if layer:
        changes["sensor_layer"] = instrument.sensor_layer.model_copy(update=layer)
    tilts = _tilts(values)
    if tilts.any():
        field = tilted(instrument.bias_field, tilts) * 1e3
        changes["bias_field_mT"] = tuple(float(part) for part in field)
    return instrument.model_copy(update=changes) if changes else instrument


def _tilts(values: Values) -> FloatArray:
    return np.radians([values.get(f"bias_tilt_{n}_deg", 0.0) for n in (1, 2)])


def tilted(field: FloatArray, tilts: FloatArray) -> FloatArray:
    """A vector turned by |tilts| rad towards tilts[0] e1 + tilts[1] e2; its length stays."""
    angle = float(np.linalg.norm(tilts))
    if angle == 0:
        return field
    first, second = precession_frame(field)
    towards = (tilts[0] * first + tilts[1] * second) / angle
    return np.cos(angle) * field + np.sin(angle) * np.linalg.norm(field) * towards


def delay_rates(instrument: Instrument) -> tuple[FloatArray, FloatArray]:
    """Wavenumber lost per µs of delay along each axis, nuclear (3,) and sensor (2,), rad/m."""
    gradients = instrument.gradients
    nuclear = np.array(gradients.nuclear_strength_mT_per_m) * (2e-9 * np.pi * PROTON_HZ_PER_T)
    sensor = np.array(gradients.sensor_strength_mT_per_m) * (2e-9 * np.pi * ELECTRON_HZ_PER_T)
    return nuclear, sensor


def _protocol(instrument: Instrument, protocol: Protocol, values: Values) -> Protocol:
    lost = delay_rates(instrument)
    for whose, axes, rates in (("nuclear", "xyz", lost[0]), ("sensor", "xy", lost[1])):
        delays = np.array([values.get(f"{whose}_delay_{a}_us", 0.0) for a in axes])
        if delays.any():
            name = f"{whose}_wavevector"
            wave = getattr(protocol, name)
            left = np.maximum(np.abs(wave) - delays * rates, 0)
            protocol = replace(protocol, **{name: np.sign(wave) * left})
    matrices = {
        whose: gradient_matrix(values, whose)
        for whose in ("nuclear", "sensor")
        if any(name.startswith(f"{whose}_matrix") for name in values)
    }
    if matrices:
        protocol = calibrated(protocol, **matrices)
    factor = values.get("signal_scale", 1.0) * np.exp(
        1j * np.radians(values.get("signal_phase_deg", 0.0))
    )
    factor *= _frame_phase(instrument.bias_field, _tilts(values))
    return protocol if factor == 1 else replace(protocol, amplitude=protocol.amplitude * factor)


def _frame_phase(field: FloatArray, tilts: FloatArray) -> complex:
    """Factor that keeps the magnetisation's phase while the bias field turns under it.

    The phase of e1 − i e2 is a convention that jumps where the field passes through z. Turned
    along with the field by the smallest rotation, the magnetisation keeps its own.
    """
    if not tilts.any():
        return 1.0
    length = np.linalg.norm(field)
    turned = tilted(field, tilts) / length
    axis = np.cross(field / length, turned)
    rotation = Rotation.from_rotvec(axis / np.linalg.norm(axis) * np.linalg.norm(tilts))
    kept = rotation.as_matrix() @ magnetisation_direction(field)
    factor = np.vdot(magnetisation_direction(turned), kept) / 2
    return complex(factor / abs(factor))


def gradient_matrix(values: Values, whose: str) -> FloatArray:
    """M of the "nuclear" or S of the "sensor" gradients; entries not given are the identity's."""
    axes = "xyz" if whose == "nuclear" else "xy"
    return np.array(
        [[values.get(f"{whose}_matrix_{r}{c}", float(r == c)) for c in axes] for r in axes]
    )


def wave_directions(
    quantity: Quantity, instrument: Instrument, protocol: Protocol, values: Values
) -> FloatArray:
    """Change of every shot's true (kx, ky, kz, qx, qy) per unit of a quantity, (shots, 5), rad/m.

    The wavevectors are linear in each quantity, so a central difference is exact.
    """
    step = 1e-3 * quantity.reach
    sides = []
    for sign in (1, -1):
        moved = {**values, quantity.name: values[quantity.name] + sign * step}
        _, table = described(instrument, protocol, moved)
        sides.append(np.hstack([table.nuclear_wavevector, table.sensor_wavevector]))
    return np.asarray((sides[0] - sides[1]) / (2 * step))
