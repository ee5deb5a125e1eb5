"""The loss over the limb of a source below it: one knife edge, or a smooth sphere.

What still arrives of the Earth's or the Sun's noise once they have set behind the Moon; the
interference stage takes its loss from here. A real limb lies between the two: topography
makes it rougher than a sphere and rounder than an edge.

* **Knife edge** (Recommendation ITU-R P.526-15, section 4.1): a screen at the limb, J(v).
* **Smooth sphere**: the residue series of the bent ray on an impedance surface (Fock 1965,
  Electromagnetic Diffraction and Propagation Problems; Recommendation ITU-R P.526-15, section
  3.1, is its first term), and next to the shadow's edge the edge's own Fresnel integral with
  Fock's correction for the round (form of Pathak 1979, Radio Science 14, 419). The geometry is
  that of the sphere, also where heights are not small beside the radius.

Both losses are relative to free space and hold for the source as a point; no atmosphere.
"""

from __future__ import annotations

from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ai_zeros, airy, wofz

from sims.constants import SPEED_OF_LIGHT_M_PER_S
from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
Method = Literal["knife-edge", "smooth-sphere"]

CLEAR_V = -0.7806  # where J(v) is 0 dB: the path clears the edge by 0.552 of the first Fresnel radius
SERIES_FROM = 0.5  # bent path, in units of the shadow's natural angle, from which the residue series is summed
TERMS = 16  # of the series: the next is below exp(-0.87 x 0.5 x 16) of the first at SERIES_FROM
LEAST_WAVES = 1000.0  # radius times wavenumber; below it the sphere is not large beside the wave
LEAST_CLEARANCE = 4.0  # distance to the limb in natural units; nearer, the antenna stands in the surface's own wave
LEAST_IMPEDANCE = 5.0  # normalised surface impedance, above which no pole of the series is lost
_THIRD_TURN = np.exp(2j * np.pi / 3.0)
_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(64)
_QUADRATURE_END = 8.0  # the integrands fall as exp(-4/3 t^1.5): to 1e-13 there


def horizon_distance_km(altitude_km: ArrayLike, radius_km: float) -> FloatArray:
    """Distance along the line of sight to the limb of a sphere, km, from this height above it."""
    altitude = np.asarray(altitude_km, dtype=float)
    return np.asarray(np.sqrt(altitude * (2.0 * radius_km + altitude)))


def diffraction_loss_db(
    frequency_mhz: float,
    depth_rad: ArrayLike,
    distance_km: ArrayLike,
    radius_km: float,
    method: Method = "knife-edge",
    *,
    permittivity: float | None = None,
    source_km: ArrayLike = np.inf,
) -> FloatArray:
    """Loss over the limb relative to free space.

    Parameters
    ----------
    frequency_mhz : float
        Frequency, MHz.
    depth_rad : array_like[...]
        Angle of the source below the limb as the antenna sees it, rad; negative above.
    distance_km : array_like[...]
        Distance from the antenna to the limb, km (`horizon_distance_km`), or for a knife edge
        to a ridge that hides the source.
    radius_km : float
        Of the body, km.
    method : "knife-edge" or "smooth-sphere"
    permittivity : float, optional
        Relative permittivity of the surface; a smooth sphere needs it.
    source_km : array_like[...]
        Distance from the antenna to the source, km.

    Returns
    -------
    ndarray[...]
        Loss, dB: 6 dB at the knife edge's shadow line, about 7 dB at a smooth Moon's; 0 dB
        for clearances above 0.552 of the first Fresnel radius.

    Raises
    ------
    InputError
        If a value is not allowed, or the antenna is too near the ground for the method.
    """
    given = np.broadcast_arrays(*(np.asarray(value, dtype=float) for value in (depth_rad, distance_km, source_km)))
    depth, distance, source = (values.ravel() for values in given)
    problems = _input_problems(frequency_mhz, depth, distance, radius_km, source)
    if method not in ("knife-edge", "smooth-sphere"):
        problems.append(f'method: "{method}"; allowed: "knife-edge", "smooth-sphere"')
    if method == "smooth-sphere" and (permittivity is None or not 1.0 < permittivity < np.inf):
        problems.append(f"permittivity: {permittivity}; a smooth sphere needs one, above 1")
    raise_if_any(problems)
    v = fresnel_parameter(frequency_mhz, depth, distance, source)
    if method == "knife-edge" or permittivity is None:
        loss = knife_edge_loss_db(v)
    else:
        path = _bent_path(depth, distance, radius_km, source)
        loss = _smooth_sphere_db(frequency_mhz, radius_km, permittivity, v, path)
    return loss.reshape(given[0].shape)


def _input_problems(
    frequency_mhz: float, depth: FloatArray, distance: FloatArray, radius_km: float, source: FloatArray
) -> list[str]:
    problems = [
        f"{name}: {value:g}; it must be finite and above 0"
        for name, value in (("frequency_mhz", frequency_mhz), ("radius_km", radius_km))
        if not 0.0 < value < np.inf
    ]
    if not np.all((distance > 0.0) & (distance < np.inf)):
        problems.append("distance_km: every distance to the limb must be finite and above 0")
    elif not np.all(source > distance):
        problems.append("source_km: the source must lie beyond the limb")
    if not np.all(np.abs(depth) <= np.pi):
        problems.append("depth_rad: must lie within -pi to pi")
    return problems


def fresnel_parameter(
    frequency_mhz: float, depth_rad: FloatArray, distance_km: FloatArray, source_km: FloatArray
) -> FloatArray:
    """Parameter v of diffraction over an edge.

    Parameters
    ----------
    frequency_mhz : float
        Frequency, MHz.
    depth_rad : ndarray[...]
        Angle of the source below the edge, rad.
    distance_km, source_km : ndarray[...]
        From the antenna to the edge and to the source, km.

    Returns
    -------
    ndarray[...]
        v = 2 sqrt(detour over wavelength), with the sign of the depth. For small angles this
        is equation 26 of ITU-R P.526-15, at any angle Sommerfeld's for a half-plane.
    """
    half = np.sin(0.5 * depth_rad)
    # The detour d1 + d2 - d is free of cancellation in terms of d1 / d, which is 0 for a source at infinity.
    nearness = distance_km / source_km
    beyond = np.sqrt((1.0 - nearness) ** 2 + 4.0 * nearness * half**2)
    detour_km = 4.0 * distance_km * half**2 / (beyond + 1.0 - nearness)
    wavelength_km = SPEED_OF_LIGHT_M_PER_S / frequency_mhz * 1e-9
    return np.asarray(2.0 * np.sign(depth_rad) * np.sqrt(detour_km / wavelength_km))


def knife_edge_loss_db(v: ArrayLike) -> FloatArray:
    """Loss over a knife edge: J(v) of ITU-R P.526-15, equation 31, and 0 dB where that would be negative."""
    shifted = np.maximum(np.asarray(v, dtype=float), -1.0) - 0.1
    return np.asarray(np.maximum(6.9 + 20.0 * np.log10(np.sqrt(shifted**2 + 1.0) + shifted), 0.0))


def knife_edge_integral_db(v: ArrayLike) -> FloatArray:
    """Loss over a knife edge by the Fresnel integral itself, dB; it swings about 0 dB in the light."""
    return np.asarray(-20.0 * np.log10(np.abs(_edge_field(np.asarray(v, dtype=float)))))


def _edge_field(v: FloatArray) -> ComplexArray:
    """Field behind an edge over that without it, but for the phase of the unobstructed wave."""
    return np.asarray(0.5 * wofz(np.exp(0.25j * np.pi) * np.sqrt(0.5 * np.pi) * v))


class _Path(NamedTuple):
    """The way round a sphere: angle bent through along the ground, rad, and the limb's distance over the radius.

    With a source at a distance the latter is the harmonic combination of both tangents' lengths.
    """

    bent_rad: FloatArray
    tangent: FloatArray


def _bent_path(depth: FloatArray, distance_km: FloatArray, radius_km: float, source_km: FloatArray) -> _Path:
    """How far the ray creeps along the ground: for a source at infinity the depth itself, nearer more."""
    own = distance_km / radius_km
    height = np.hypot(1.0, own)
    from_nadir = np.arctan2(1.0, own) - depth
    if np.any(from_nadir < 0.0):
        raise InputError("depth_rad: the source lies deeper than the body's centre; count from the nearer limb")
    inverse = radius_km / source_km
    # Place of the source from the body's centre, times `inverse` so that it stays finite at infinity.
    across, up = np.sin(from_nadir), height * inverse - np.cos(from_nadir)
    away = np.hypot(across, up)
    if np.any((away <= inverse) & (depth > 0.0)):
        raise InputError("source_km: the source lies inside the body")
    between = np.arctan2(across, up)
    over_source = np.arcsin(np.clip(inverse / away, 0.0, 1.0))
    bent = between - np.arctan(own) - (0.5 * np.pi - over_source)
    return _Path(bent, own / (1.0 + own * np.tan(over_source)))


def _smooth_sphere_db(
    frequency_mhz: float, radius_km: float, permittivity: float, v: FloatArray, path: _Path
) -> FloatArray:
    """Loss over a smooth sphere for unpolarised waves; in the light as P.526 has it, see below."""
    waves = 2.0 * np.pi * frequency_mhz * 1e9 / SPEED_OF_LIGHT_M_PER_S * radius_km
    scale = np.cbrt(0.5 * waves)
    clearance = scale * path.tangent
    root = np.sqrt(permittivity - 1.0)
    impedances = [1j * scale * root, 1j * scale * root / permittivity]  # horizontal, vertical
    problems = []
    if waves < LEAST_WAVES:
        problems.append(f"radius over wavelength: {waves / (2 * np.pi):.3g}; at least {LEAST_WAVES / (2 * np.pi):.3g}")
    elif np.min(clearance, initial=np.inf) < LEAST_CLEARANCE:
        least_km = LEAST_CLEARANCE / scale * radius_km
        problems.append(
            f"distance_km: nearer to the limb than {least_km:.3g} km at {frequency_mhz:g} MHz; an antenna this low "
            "stands in the surface's own wave: take the knife edge at the distance of the ridge"
        )
    if waves >= LEAST_WAVES and min(abs(q) for q in impedances) < LEAST_IMPEDANCE:
        problems.append(f"permittivity: {permittivity:g}; the surface hardly reflects or nearly conducts: not treated")
    raise_if_any(problems)

    # The reflected ray belongs to the mirror in the ground, not to this loss. As in P.526-15, section 3.2, in the light
    # the loss falls in proportion from grazing to nothing at 0.552 of the first Fresnel radius.
    share = np.where(path.bent_rad <= 0.0, np.clip(1.0 - v / CLEAR_V, 0.0, 1.0), 1.0)
    bent = scale * np.maximum(path.bent_rad, 0.0)
    deep = bent >= SERIES_FROM
    near = ~deep & (share > 0.0)
    log_power = np.zeros((2, *bent.shape))
    for polarisation, q in enumerate(impedances):
        log_power[polarisation, near] = 2.0 * _log_field_near(bent[near], clearance[near], q)
        log_power[polarisation, deep] = 2.0 * _log_field_deep(bent[deep], clearance[deep], q)
    mean_log_power = np.logaddexp(log_power[0], log_power[1]) - np.log(2.0)
    return np.asarray(0.0 - 10.0 / np.log(10.0) * mean_log_power * share)


def _outgoing(t: NDArray[Any]) -> tuple[ComplexArray, ComplexArray]:
    """Fock's Airy function w1 and its derivative."""
    value, slope, _, _ = airy(t * _THIRD_TURN)
    factor = 2.0 * np.sqrt(np.pi) * np.exp(1j * np.pi / 6.0)
    return factor * value, factor * _THIRD_TURN * slope


def _incoming(t: NDArray[Any]) -> tuple[ComplexArray, ComplexArray]:
    """Fock's Airy function w2 and its derivative."""
    value, slope, _, _ = airy(t / _THIRD_TURN)
    factor = 2.0 * np.sqrt(np.pi) * np.exp(-1j * np.pi / 6.0)
    return factor * value, factor / _THIRD_TURN * slope


def _log_height(t: ComplexArray, clearance: FloatArray) -> ComplexArray:
    """Log of w1(t - y) for y = clearance squared, less that of its leading form exp(-i t clearance) / sqrt(clearance).

    From the asymptotic form of w1, free of cancellation; off by 5/48 of |y - t|^-1.5.
    """
    root = np.sqrt(1.0 - t / clearance**2)
    return np.asarray(2j / 3.0 * t**2 / clearance * (root + 0.5) / (1.0 + root) ** 2 - 0.5 * np.log(root))


def _log_field_deep(bent: FloatArray, clearance: FloatArray, q: complex) -> FloatArray:
    """Log of the field's modulus from the residue series (Fock 1965), at the roots of w1' = q w1."""
    t = -ai_zeros(TERMS)[0] * np.exp(1j * np.pi / 3.0) + 1.0 / q
    for _ in range(8):
        value, slope = _outgoing(t)
        t = t - (slope - q * value) / (t * value - q * slope)
    _, slope = _outgoing(t)
    excitation = np.log((t - q**2) * (slope / q) ** 2)
    exponent = 1j * bent[:, None] * t + _log_height(t, clearance[:, None]) - excitation
    # Deep in the shadow the field is below the smallest number: its greatest term is taken out.
    greatest = exponent.real.max(axis=1, initial=-np.inf)
    total = np.exp(exponent - greatest[:, None]).sum(axis=1)
    return np.asarray(greatest + np.log(np.abs(total)) + np.log(2.0 * np.sqrt(np.pi / clearance)))


def _log_field_near(bent: FloatArray, clearance: FloatArray, q: complex) -> FloatArray:
    """Log of the field's modulus by the edge's Fresnel integral and Fock's integral for the round."""
    t = 0.5 * _QUADRATURE_END * (_NODES + 1.0) + 0j
    weight = 0.5 * _QUADRATURE_END * _NODE_WEIGHTS
    standing, standing_slope = (np.sqrt(np.pi) * part for part in airy(t)[:2])
    value, slope = _outgoing(t)
    right = -2j * weight * (standing_slope - q * standing) / (slope - q * value)
    turned = t * _THIRD_TURN
    (out, out_slope), (back, back_slope) = _outgoing(turned), _incoming(turned)
    left = -_THIRD_TURN * weight * (back_slope - q * back) / (out_slope - q * out)
    where, kernel = np.concatenate([turned, t]), np.concatenate([left, right])
    wave = np.exp(1j * bent[:, None] * where + _log_height(where, clearance[:, None]))
    edge = _edge_field(np.sqrt(2.0 / np.pi * clearance) * bent)
    scale = np.exp(-0.25j * np.pi) / (2.0 * np.sqrt(np.pi * clearance))
    round_off = scale * (wave @ kernel) + scale * _edge_height(edge / scale, bent, clearance)
    return np.asarray(np.log(np.abs(edge + round_off)))


def _edge_height(integral: ComplexArray, bent: FloatArray, clearance: FloatArray) -> ComplexArray:
    """What `_log_height` adds, to first order, to the edge's integral of exp(i bent t + i t^2 / (4 clearance)).

    The height function is there taken to the square of t in its exponent; its next terms are
    t / (4 clearance^2) and i t^3 / (24 clearance^3), whose integrals follow by parts.
    """
    factor, turn = 2j * clearance, 1j * bent
    first = factor * (1.0 + turn * integral)
    second = factor * (integral + turn * first)
    third = factor * (2.0 * first + turn * second)
    return np.asarray(first / (4.0 * clearance**2) + 1j * third / (24.0 * clearance**3))
