"""The surface of the body below: how much of the sky it reflects, and how bright it is.

The engine takes the mirror image of the sky from `sims.mirror`, weighs it with the
reflectivity of this file, and lets the surface emit, at the temperature given here, what
it does not reflect: an isotropic sky at the surface's own temperature comes back unchanged.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sims.config_vantage import Layer, Surface
from sims.constants import SPEED_OF_LIGHT_M_PER_S, rayleigh_jeans_k
from sims.profile import cubic_table

FloatArray = NDArray[np.float64]
REFLECTIVITY_TOLERANCE = 1e-9


def fresnel_reflectivity(cosine_incidence: FloatArray, permittivity: float) -> FloatArray:
    """Power reflectivity of a smooth lossless dielectric for unpolarised waves (Fresnel).

    Parameters
    ----------
    cosine_incidence : ndarray[...]
        Cosine of the angle of incidence.
    permittivity : float
        Relative permittivity, at least 1.

    Returns
    -------
    ndarray[...]
        Mean of the two polarisations. The antenna's own polarisation is left out.
    """
    across, along = _amplitudes(np.asarray(cosine_incidence, dtype=float), 1.0, permittivity)
    return np.asarray(0.5 * (np.abs(across) ** 2 + np.abs(along) ** 2))


def layered_reflectivity(
    cosine_incidence: FloatArray, permittivity: float, layer: Layer, frequency_mhz: FloatArray
) -> FloatArray:
    """Power reflectivity of a layer over a half-space of another permittivity, unpolarised.

    Parameters
    ----------
    cosine_incidence : ndarray[point]
        Cosine of the angle of incidence.
    permittivity : float
        Relative permittivity of the top layer.
    layer : Layer
        Its thickness and loss tangent, and the permittivity of what lies under it.
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.

    Returns
    -------
    ndarray[point, frequency]
        |(r1 + r2 e^(2 i d)) / (1 + r1 r2 e^(2 i d))|^2 with r1 and r2 of the two faces and d the phase
        across the layer (Born and Wolf, Principles of Optics, section 1.6.4), mean of the
        two polarisations. What the lossy layer absorbs it emits: emissivity is 1 less this.
    """
    cosine = np.asarray(cosine_incidence, dtype=float)
    inside = permittivity * (1.0 + 1j * layer.loss_tangent)
    wave_per_m = 2.0 * np.pi * frequency_mhz * 1e6 / SPEED_OF_LIGHT_M_PER_S
    phase = wave_per_m * layer.thickness_m * np.sqrt(inside - 1.0 + cosine**2 + 0j)[:, None]
    turned = np.exp(2j * phase)
    total = np.zeros(turned.shape)
    upper = _amplitudes(cosine, 1.0, inside)
    lower = _amplitudes(cosine, inside, layer.permittivity)
    for first, second in zip(upper, lower, strict=True):
        r1, r2 = first[:, None], second[:, None]
        total += 0.5 * np.abs((r1 + r2 * turned) / (1.0 + r1 * r2 * turned)) ** 2
    return total


def _amplitudes(cosine: FloatArray, above: complex, below: complex) -> tuple[NDArray[np.complex128], ...]:
    """Fresnel amplitudes across and along the plane of incidence, by the cosine of incidence in vacuum.

    Slightly negative cosines continue the functions smoothly beyond grazing; one of them breaks
    at -1 / sqrt(1 + permittivity).
    """
    c = cosine
    root_above = c + 0j if above == 1.0 else np.sqrt(above - 1.0 + c**2 + 0j)
    root_below = np.sqrt(below - 1.0 + c**2 + 0j)
    if above == below:
        return np.zeros_like(root_below), np.zeros_like(root_below)
    across = (root_above - root_below) / (root_above + root_below)
    along = (below * root_above - above * root_below) / (below * root_above + above * root_below)
    return across, along


def reflectivity_table(surface: Surface, frequency_mhz: FloatArray) -> FloatArray:
    """Reflectivity tabulated against the cosine of incidence, from a little below 0 to 1.

    Parameters
    ----------
    surface : Surface
        The ``[surface]`` table; without reflection all is zero.
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.

    Returns
    -------
    ndarray[interval, 4, frequency or 1]
        Cubics on equal intervals from `lowest_cosine` to 1; one column where frequency does
        not matter.
    """

    def columns(cosine: FloatArray) -> FloatArray:
        if not surface.reflection:
            return np.zeros((len(cosine), 1))
        if surface.layer is None:
            return fresnel_reflectivity(cosine, surface.permittivity)[:, None]
        return layered_reflectivity(cosine, surface.permittivity, surface.layer, frequency_mhz)

    return cubic_table(columns, lowest_cosine(surface), 1.0, tolerance=REFLECTIVITY_TOLERANCE, intervals=512, cap=65536)


def lowest_cosine(surface: Surface) -> float:
    """Where the table of the reflectivity begins: half the way to where its continuation breaks."""
    densest = surface.permittivity if surface.layer is None else max(surface.permittivity, surface.layer.permittivity)
    return float(-0.5 / np.sqrt(1.0 + densest))


def surface_brightness_k(surface: Surface, frequency_mhz: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Rayleigh-Jeans brightness of the surface where it is black: on the equator, and what the poles lack of it.

    Parameters
    ----------
    surface : Surface
        Temperature at the equator (or everywhere), at the poles, and the exponent with which
        both change with frequency: deeper layers are seen at lower ones.
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.

    Returns
    -------
    equator_k, change_k : ndarray[frequency]
        Brightness is equator_k + change_k sin^2(latitude), K.
    """
    ratio = np.ones_like(frequency_mhz)
    if surface.temperature_frequency_mhz is not None:
        ratio = (frequency_mhz / surface.temperature_frequency_mhz) ** surface.temperature_exponent
    equator = rayleigh_jeans_k(surface.temperature_k * ratio, frequency_mhz)
    if surface.polar_temperature_k is None:
        return equator, np.zeros_like(equator)
    return equator, rayleigh_jeans_k(surface.polar_temperature_k * ratio, frequency_mhz) - equator
