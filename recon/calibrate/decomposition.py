"""Gradient matrices told as strengths, directions and shear, and what the camera shares in them.

The lateral block of a matrix is split into a turn and a symmetric stretch, B = R(θ) T: strengths
are T_xx and T_yy, the shear is T_xy. Pixels are the ruler, so a camera turned by α and magnified
by m puts the common factor R(α)/m in front of both matrices; what the two have in common is the
camera's, or that of all gradients together: no record tells these apart. Each kind of gradient may
be off by itself, so the camera's part is their plain mean, uncertain by half of their difference.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from recon.calibrate.ascent import GeometryFit
from recon.calibrate.estimate import Estimate
from recon.calibrate.geometry_parameters import gradient_matrix

FloatArray = NDArray[np.floating]
Told = dict[str, tuple[str, float]]

STEP = 1e-6


@dataclass(frozen=True)
class Decomposition:
    """Derived quantities, and one line for each that no record can tell.

    Attributes
    ----------
    estimates
        For each kind of gradient that was calibrated ("nuclear", "sensor"): strengths along x, y
        (and z), rotation and shear in the plane, tilts out of it where they were asked for;
        camera_rotation_deg and camera_magnification where both kinds were calibrated.
    lines
        What stays open.
    """

    estimates: tuple[Estimate, ...]
    lines: tuple[str, ...]

    def __getitem__(self, name: str) -> Estimate:
        return next(one for one in self.estimates if one.name == name)


def decomposition(fit: GeometryFit) -> Decomposition:
    """Strengths, directions and shear of calibrated gradients, with propagated standard errors."""
    free = [one for one in fit.estimates if not one.fixed]
    kinds = [
        whose
        for whose in ("nuclear", "sensor")
        if any(one.name.startswith(f"{whose}_matrix") for one in fit.estimates)
    ]
    own = [one for whose in kinds for one in _propagated(fit, _derived(whose))]
    asked = {one.name for one in free}
    own = [one for one in own if not one.name.endswith("tilt_deg") or _axial(one.name) & asked]
    if len(kinds) < 2:
        line = "camera rotation and magnification cannot be told from those of the gradients; "
        return Decomposition(
            tuple(own), (line + "calibrate nuclear and sensor gradients together",) if kinds else ()
        )
    common, line = _camera(fit)
    return Decomposition((*own, *common), (line,))


def _axial(name: str) -> set[str]:
    """Matrix entry behind nuclear_<from>_<to>_tilt_deg."""
    _, source, target, *_ = name.split("_")
    return {f"nuclear_matrix_{target}{source}"}


def _split(block: FloatArray) -> tuple[float, FloatArray]:
    """θ and T of B = R(θ) T (polar decomposition; T has the trace of the nearest rotation)."""
    angle = float(np.arctan2(block[1, 0] - block[0, 1], block[0, 0] + block[1, 1]))
    cosine, sine = np.cos(angle), np.sin(angle)
    return angle, np.array([[cosine, sine], [-sine, cosine]]) @ block


def _derived(whose: str) -> Callable[[dict[str, float]], Told]:
    def derive(values: dict[str, float]) -> Told:
        matrix = gradient_matrix(values, whose)
        angle, stretch = _split(matrix[:2, :2])
        told: Told = {
            f"{whose}_strength_x": ("1", stretch[0, 0]),
            f"{whose}_strength_y": ("1", stretch[1, 1]),
            f"{whose}_rotation_deg": ("deg", np.degrees(angle)),
            f"{whose}_shear": ("1", (stretch[0, 1] + stretch[1, 0]) / 2),
        }
        if whose == "nuclear":
            told["nuclear_strength_z"] = "1", float(np.linalg.norm(matrix[:, 2]))
            for source, target in ((0, 2), (1, 2), (2, 0), (2, 1)):
                tilt = np.degrees(np.arctan2(matrix[target, source], matrix[source, source]))
                told[f"nuclear_{'xyz'[source]}_{'xyz'[target]}_tilt_deg"] = "deg", float(tilt)
        return told

    return derive


def _propagated(fit: GeometryFit, derive: Callable[[dict[str, float]], Told]) -> list[Estimate]:
    slopes = _slopes(fit, derive)
    free = [one for one in fit.estimates if not one.fixed]
    unknown = np.array([not one.known for one in free])
    found = []
    values = {one.name: one.value for one in fit.estimates}
    for (name, (unit, value)), slope in zip(derive(values).items(), slopes, strict=True):
        if not slope.any():  # nothing in it was calibrated
            continue
        error = float(np.sqrt(slope @ fit.covariance @ slope))
        if (np.abs(slope[unknown]) > 1e-3).any():
            error = np.inf
        found.append(Estimate(name, unit, float(value), error))
    return found


def _slopes(fit: GeometryFit, derive: Callable[[dict[str, float]], Told]) -> FloatArray:
    """Derivatives (derived, estimated) by central differences."""
    values = {one.name: one.value for one in fit.estimates}
    columns = []
    for one in fit.estimates:
        if one.fixed:
            continue
        sides = [
            np.array(
                [value for _, value in derive({**values, one.name: one.value + step}).values()]
            )
            for step in (STEP, -STEP)
        ]
        columns.append((sides[0] - sides[1]) / (2 * STEP))
    return np.stack(columns, axis=1)


def _camera(fit: GeometryFit) -> tuple[list[Estimate], str]:
    """The mean of what both matrices have; half of their difference counts as an error."""

    def derive(values: dict[str, float]) -> Told:
        told: Told = {}
        for whose in ("nuclear", "sensor"):
            angle, stretch = _split(gradient_matrix(values, whose)[:2, :2])
            told[f"{whose} angle"] = "deg", np.degrees(angle)
            told[f"{whose} scale"] = "1", np.log(np.abs(np.diag(stretch))).mean()
        return told

    values = {one.name: one.value for one in fit.estimates}
    numbers = np.array([value for _, value in derive(values).values()])
    slopes = _slopes(fit, derive)
    covariance = slopes @ fit.covariance @ slopes.T
    told = []
    for part in (0, 1):
        own, half = covariance[part::2, part::2].sum() / 4, np.diff(numbers[part::2])[0] / 2
        told.append((float(numbers[part::2].mean()), float(np.hypot(np.sqrt(own), half))))
    (turn, turn_error), (scale, scale_error) = told
    size = float(np.exp(-scale))
    return [
        Estimate("camera_rotation_deg", "deg", turn, turn_error),
        Estimate("camera_magnification", "1", size, size * scale_error),
    ], (
        "the camera's rotation and magnification are those that nuclear and sensor gradients "
        "share; the record cannot tell them from a common error of both"
    )
