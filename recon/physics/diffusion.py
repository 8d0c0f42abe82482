"""Molecules move while they precess: what diffusion leaves of a wound pattern.

Lateral wavenumber u decays as exp(−D u² t). Along z, between the diamond face and the slice's top,
nothing flows through the ends; in the cosine basis cos(nπz/a) mode n decays as exp(−D (nπ/a)² t).
Sources: Crank, The Mathematics of Diffusion (1975), for the slab; Stejskal & Tanner,
J. Chem. Phys. 42:288 (1965), for gradient pulses.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from recon.physics.dipole import decay_integral

FloatArray = NDArray[np.floating]
ComplexArray = NDArray[np.complexfloating]

ENOUGH = 40.0
"""Modes whose decay exponent exceeds this contribute less than 1e-17."""

MODES = 256
"""Modes kept where a wound pattern is seen; what later ones lose falls as 1/MODES²."""


def lateral_decay(wavenumber: ArrayLike, diffusion: float, time: ArrayLike) -> FloatArray:
    """exp(−D u² t); wavenumbers in rad/m, diffusion in m²/s, time in s, broadcast together."""
    return np.exp(-diffusion * np.asarray(wavenumber, float) ** 2 * np.asarray(time, float))


def line_width(diffusion: float, voxel: float) -> float:
    """Full width at half maximum, Hz, of a line that is listened to while wound to u = π/voxel.

    The decay rate D (π/voxel)² is a Lorentzian of width rate/π = π D/voxel².
    """
    return np.pi * diffusion / voxel**2


def slab_propagator(count: int, thickness: float, diffusion: float, time: float) -> FloatArray:
    """Where molecules of each of `count` equal layers of a closed slab are after a time.

    Entry [i, j] is the share of what was spread evenly in layer j that is in layer i. Exact means
    over layers of the cosine series; columns sum to 1. At short times, when the series is long,
    the walls are reflected instead.

    Parameters
    ----------
    thickness
        Of the whole slab, metres.
    """
    if diffusion * time == 0:
        return np.eye(count)
    edge = thickness / count
    if np.sqrt(2 * diffusion * time) < 0.1 * edge:
        return _by_reflection(count, edge, np.sqrt(2 * diffusion * time))
    rate = diffusion * time * (np.pi / thickness) ** 2
    modes = np.arange(1, int(np.ceil(np.sqrt(ENOUGH / rate))) + 2)
    centres = (np.arange(count) + 0.5) * edge
    half = modes * np.pi * edge / (2 * thickness)
    means = np.cos(modes * np.pi * centres[:, None] / thickness) * np.sinc(half / np.pi)
    return (1 + 2 * (means * np.exp(-rate * modes**2)) @ means.T) / count


def _by_reflection(count: int, edge: float, spread: float) -> FloatArray:
    """Gaussian steps much shorter than a layer: only neighbours exchange, walls reflect.

    The share of an even layer that a normal step of standard deviation σ carries over an edge is
    σ/(√(2π) · edge), apart from steps longer than the layer, which are ten σ here.
    """
    crossing = spread / (np.sqrt(2 * np.pi) * edge)
    matrix = np.eye(count)
    for low in range(count - 1):
        matrix[low, low] -= crossing
        matrix[low + 1, low + 1] -= crossing
        matrix[low, low + 1] = matrix[low + 1, low] = crossing
    return matrix


def mode_overlap(
    decay: ArrayLike, modes: FloatArray, low: ArrayLike, length: float, thickness: float
) -> ComplexArray:
    """∫ exp(−s z) cos(nπz/a) dz over `length` from `low`, for complex s, broadcast together."""
    turn = 1j * np.pi / thickness * modes
    low = np.asarray(low, float)
    halves = [
        np.exp(-exponent * low) * decay_integral(exponent, length)
        for exponent in (np.asarray(decay, complex) + turn, np.asarray(decay, complex) - turn)
    ]
    return 0.5 * (halves[0] + halves[1])


def wound_layers(
    wavenumber: FloatArray,
    count: int,
    thickness: float,
    axial_wavenumber: float,
    spread: FloatArray,
    standing: bool = False,
) -> ComplexArray:
    """What is seen of the layers of a closed slab once their wound pattern has spread along z.

    With p(z, z'; Dt) the slab's propagator over the heights 0 … a, layer i seen through exp(−κz)::

        A_i(κ, t) = ∫∫ exp(−κz) p(z, z'; Dt) exp(i k_z z') dz' dz

    with z' in layer i and z anywhere (molecules carry amount and phase away), or, `standing`, z in
    layer i and z' anywhere (amounts stay as they are, molecules change places and mix phases).

    Parameters
    ----------
    wavenumber
        κ, (κs,), rad/m.
    spread
        D t, (times,), m².

    Returns
    -------
    (times, layers, κs), metres.
    """
    edge = thickness / count
    lower = np.arange(count) * edge
    along = np.asarray(wavenumber - 1j * axial_wavenumber, np.complex128)
    start = np.exp(-np.outer(lower, along)) * decay_integral(along, edge)
    seen = np.tile(start, (len(spread), 1, 1))
    if standing and axial_wavenumber == 0:
        return seen
    modes = np.arange(MODES, dtype=float)
    seen_through = np.asarray(wavenumber, np.complex128)[:, None]
    wound_by = np.array([[-1j * axial_wavenumber]])
    layer, slab = (seen_through, wound_by) if standing else (wound_by, seen_through)
    whole = mode_overlap(slab, modes, 0.0, thickness, thickness)
    whole = whole * (np.where(modes == 0, 1, 2) / thickness)
    exponent = np.outer((modes * np.pi / thickness) ** 2, spread)
    late = exponent[-1] > ENOUGH
    left = np.where(late, np.exp(-exponent), np.expm1(-exponent)).astype(complex)
    seen[late] = 0
    for place, low in enumerate(lower):
        overlap = whole * mode_overlap(layer, modes, low, edge, thickness)
        seen[:, place] += (overlap @ left).T
    return seen


def restricted_signal(
    wavenumber: float, thickness: float, diffusion: float, time: float
) -> complex:
    """Signal of a closed slab wound by exp(i k z) and rewound after a time, unit at time 0.

    Σ_n p_n |∫ cos(nπz/a) e^{ikz} dz/a|² exp(−D (nπ/a)² t), p_0 = 1, p_n = 2. Its plateau at long
    times is |sin(ka/2)/(ka/2)|²: 4/π² at k = π/a. Source: Tanner & Stejskal, J. Chem. Phys. 49:1768
    (1968).
    """
    rate = diffusion * time * (np.pi / thickness) ** 2
    last = 200 if rate < ENOUGH / 200**2 else int(np.ceil(np.sqrt(ENOUGH / rate))) + 2
    modes = np.arange(last)
    k, a = wavenumber, thickness

    def part(turn: FloatArray) -> NDArray[np.complexfloating]:
        return np.exp(0.5j * turn * a) * np.sinc(turn * a / (2 * np.pi))

    overlaps = 0.5 * (part(k + modes * np.pi / a) + part(k - modes * np.pi / a))
    power = np.where(modes == 0, 1, 2) * np.abs(overlaps) ** 2
    return complex((power * np.exp(-rate * modes**2)).sum())


def pulse_attenuation(wavenumber: ArrayLike, diffusion: float, pulse: float) -> FloatArray:
    """What is left of a pattern wound to k by a constant gradient lasting `pulse`: exp(−D k² δ/3).

    The wavenumber grows linearly, so ∫ u² dt = k² δ/3.
    """
    return np.exp(-diffusion * np.asarray(wavenumber, float) ** 2 * pulse / 3)


def pulse_attenuation_of_total(
    total: tuple[FloatArray, FloatArray], wound: ArrayLike, diffusion: float, pulse: float
) -> FloatArray:
    """The same for a map that spreads too, by its total wavevector u = κ' + k after the pulse.

    During the pulse the total is u − k (1 − τ), τ from 0 to 1: exp(−D δ (u² − u·k + k²/3)).

    Parameters
    ----------
    total
        u along (y, x), broadcast together.
    wound
        k along (y, x).
    """
    (u_y, u_x), (k_y, k_x) = total, np.asarray(wound, float)
    mean = u_y**2 + u_x**2 - (u_y * k_y + u_x * k_x) + (k_y**2 + k_x**2) / 3
    return np.exp(-diffusion * pulse * mean)
