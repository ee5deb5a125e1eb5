"""Invented skies and random fields on the sphere, so that nothing need be downloaded.

Stands beside `sims.sky_maps`: what is drawn here takes the place of a map that is read, and
`gaussian_field` draws the errors of a map. All randomness comes from the injected generator.
Coefficients are drawn in order of multipole, so one seed gives one sky at every resolution.
"""

from __future__ import annotations

import hashlib
import math

import healpy
import numpy as np
from numpy.typing import NDArray

from sims.constants import CMB_TEMPERATURE_K
from sims.errors import InputError
from sims.sky_maps import DiffuseMap

INVENTED_FREQUENCY_MHZ = 408.0
# The sky is made no coarser than this and averaged down, so that narrow features keep their flux.
_FINE_NSIDE = 128
_HALO_LMAX = 3 * _FINE_NSIDE - 1
# Angular power of synchrotron emission at 408 MHz goes as l^-2.6 to l^-3.0 over much of the sky
# (La Porta, Burigana, Reich and Reich 2008, A&A 479, 641; from memory).
_HALO_POWER_INDEX = -2.8
# The integrand turns over a dozen times at most between 0 and 9 L: see where `top` ends.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(128)
_TOLERATED_LOSS = 0.01


def gaussian_field(
    nside: int, sd: float, correlation_length_deg: float, rng: np.random.Generator
) -> NDArray[np.float64]:
    """Draw an isotropic Gaussian field of zero mean with correlation exp(-theta^2 / (2 L^2)).

    Parameters
    ----------
    nside : int
        HEALPix resolution.
    sd : float
        Standard deviation of each pixel over the ensemble, in the unit of what is drawn.
    correlation_length_deg : float
        L, deg.
    rng : numpy.random.Generator
        Source of the (lmax + 1)^2 normal numbers.

    Returns
    -------
    ndarray[pixel]
        The field at the pixel centres, RING order; no pixel window is applied.

    Raises
    ------
    InputError
        If more than 1 % of the variance lies beyond l = 3 nside - 1 (L shorter than a
        pixel), or in multipoles that this correlation would make negative (L so long that no
        such field exists on a sphere).
    """
    spectrum = gaussian_field_spectrum(3 * nside - 1, correlation_length_deg)
    return sd * synthesised(spectrum, nside, rng)


def gaussian_field_spectrum(lmax: int, correlation_length_deg: float) -> NDArray[np.float64]:
    """Angular power spectrum of unit variance whose correlation is exp(-theta^2 / (2 L^2)).

    C_l = 2 pi int rho(theta) P_l(cos theta) sin(theta) dtheta, by Gauss-Legendre quadrature in
    theta; what is negative or lies beyond `lmax` is cut, and the rest scaled to unit variance.

    Parameters
    ----------
    lmax : int
        Highest multipole that can be carried.
    correlation_length_deg : float
        L, deg.

    Returns
    -------
    ndarray[multipole]
        C_l from l = 0 to at most `lmax`: it ends where the power is below 1e-14 of its peak.

    Raises
    ------
    InputError
        As for `gaussian_field`.
    """
    length_rad = math.radians(correlation_length_deg)
    top = min(lmax, math.ceil(8.0 / length_rad) + 8)
    reach = min(math.pi, 9.0 * length_rad)
    theta = 0.5 * reach * (_NODES + 1.0)
    kernel = np.pi * reach * _WEIGHTS * np.sin(theta) * np.exp(-0.5 * (theta / length_rad) ** 2)
    cosine = np.cos(theta)
    before, now = np.zeros_like(cosine), np.ones_like(cosine)
    raw = np.empty(top + 1)
    for multipole in range(top + 1):
        raw[multipole] = kernel @ now
        before, now = now, ((2 * multipole + 1) * cosine * now - multipole * before) / (multipole + 1)
    spectrum = np.clip(raw, 0.0, None)
    variance = float(np.sum((2 * np.arange(top + 1) + 1) * spectrum) / (4.0 * np.pi))
    if abs(variance - 1.0) > _TOLERATED_LOSS:
        raise InputError(
            f"correlation length {correlation_length_deg:g} deg: {abs(variance - 1.0):.1%} of the field's variance "
            f"cannot be carried up to multipole {lmax}; allowed: from about a pixel to some 60 deg"
        )
    return spectrum / variance


def power_law_field(
    nside: int, sd: float, angular_index: float, angular_offset: float, rng: np.random.Generator
) -> NDArray[np.float64]:
    """Draw an isotropic Gaussian field of zero mean with C_l ~ (l + l0)^-index.

    Parameters
    ----------
    nside : int
        HEALPix resolution.
    sd : float
        Standard deviation of each pixel over the ensemble, in the unit of what is drawn; all of
        it in multipoles 1 to 3 nside - 1, whatever the resolution.
    angular_index : float
        Dimensionless.
    angular_offset : float
        l0, dimensionless.
    rng : numpy.random.Generator
        Source of the (3 nside)^2 normal numbers.

    Returns
    -------
    ndarray[pixel]
        The field at the pixel centres, RING order; no pixel window is applied. Its mean over the
        sphere (l = 0) is none of it.
    """
    return sd * synthesised(power_law_spectrum(3 * nside - 1, angular_index, angular_offset), nside, rng)


def power_law_spectrum(lmax: int, angular_index: float, angular_offset: float) -> NDArray[np.float64]:
    """C_l ~ (l + l0)^-index, ndarray[multipole], from l = 0, where it is zero, to `lmax`; of unit variance."""
    multipole = np.arange(lmax + 1)
    spectrum = np.zeros(lmax + 1)
    spectrum[1:] = (multipole[1:] + angular_offset) ** -angular_index
    return np.asarray(spectrum * 4.0 * np.pi / np.sum((2 * multipole + 1) * spectrum))


def synthesised(spectrum: NDArray[np.float64], nside: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Draw a Gaussian field of a given angular power spectrum.

    Parameters
    ----------
    spectrum : ndarray[multipole]
        C_l from l = 0, square of the field's unit times sr.
    nside : int
        HEALPix resolution.
    rng : numpy.random.Generator
        Source of the numbers; multipole l takes the next 2 l + 1 of them.

    Returns
    -------
    ndarray[pixel]
        The field at the pixel centres, RING order.
    """
    lmax = spectrum.size - 1
    normal = rng.standard_normal((lmax + 1) ** 2)
    multipole, order = healpy.Alm.getlm(lmax)
    amplitude = np.sqrt(spectrum)[multipole]
    start = multipole**2
    real = normal[start + np.where(order > 0, 2 * order - 1, 0)]
    imaginary = np.where(order > 0, normal[start + 2 * order], 0.0)
    alm = amplitude * np.where(order > 0, (real + 1j * imaginary) / math.sqrt(2.0), real)
    return np.asarray(healpy.alm2map(alm, nside, lmax=lmax, pixwin=False), dtype=np.float64)


def invented_sky_map(nside: int, rng: np.random.Generator) -> DiffuseMap:
    """Invent a sky at 408 MHz: a disk, arcs, bright blobs and a fluctuating halo.

    It is shaped so that its mean, minimum and peak are of the size of the real sky's; no
    feature stands where a real one does, except the plane of the Galaxy.

    Parameters
    ----------
    nside : int
        HEALPix resolution.
    rng : numpy.random.Generator
        The same state gives the same sky; coarser maps are averages of finer ones up to nside 128.

    Returns
    -------
    DiffuseMap
        In Galactic coordinates, CMB included.
    """
    fine = max(nside, _FINE_NSIDE)
    vectors = np.column_stack(healpy.pix2vec(fine, np.arange(healpy.nside2npix(fine))))
    temperature_k = CMB_TEMPERATURE_K + _disk_k(vectors, rng) + _arcs_k(vectors, rng) + _blobs_k(vectors, rng)
    temperature_k += halo_k(fine, rng)
    coarse = np.asarray(healpy.ud_grade(temperature_k, nside), dtype=np.float64)
    checksum = hashlib.sha256(coarse.tobytes()).hexdigest()
    return DiffuseMap(coarse, nside, "galactic", 0, "invented", checksum)


def invented_index_map(nside: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Invent a map of the spectral index beta (T ~ f^-beta): near 2.55, flatter in the plane, smooth.

    Thermal emission flattens the spectrum of the plane (common practice).

    Parameters
    ----------
    nside : int
        HEALPix resolution.
    rng : numpy.random.Generator
        The same state gives the same map, as for `invented_sky_map`.

    Returns
    -------
    ndarray[pixel]
        Index, dimensionless; RING order, Galactic coordinates.
    """
    fine = max(nside, _FINE_NSIDE)
    height = healpy.pix2vec(fine, np.arange(healpy.nside2npix(fine)))[2]
    depth = rng.uniform(0.08, 0.16)
    plane = np.exp(-0.5 * (height / math.sin(math.radians(10.0))) ** 2)
    index = 2.57 - depth * plane + gaussian_field(fine, 0.03, 20.0, rng)
    return np.asarray(healpy.ud_grade(index, nside), dtype=np.float64)


def _disk_k(vectors: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.float64]:
    """Thin disk, brightest inwards, in a thick one."""
    thin_deg, thick_deg = rng.uniform(1.5, 2.5), rng.uniform(10.0, 15.0)
    peak_k, thick_k = rng.uniform(250.0, 400.0), rng.uniform(26.0, 34.0)
    latitude_deg = np.degrees(np.arcsin(np.clip(vectors[:, 2], -1.0, 1.0)))
    longitude_deg = np.degrees(np.arctan2(vectors[:, 1], vectors[:, 0]))
    inwards = np.exp(-0.5 * (longitude_deg / rng.uniform(35.0, 50.0)) ** 2)
    # Rounded at the mid-plane: a cusp there would make the map depend on where pixels fall.
    thin = np.exp(1.0 - np.sqrt(1.0 + (latitude_deg / thin_deg) ** 2))
    thick = np.exp(1.0 - np.sqrt(1.0 + (latitude_deg / thick_deg) ** 2))
    return np.asarray(peak_k * (0.15 + 0.85 * inwards) * thin + thick_k * (0.5 + 0.5 * inwards) * thick)


def _arcs_k(vectors: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.float64]:
    """Limb-brightened edges of a few large round shells, each fading along its length."""
    total = np.zeros(len(vectors))
    for _ in range(4):
        centre, bright = _direction(rng, 45.0), _direction(rng, 90.0)
        radius_deg, width_deg, peak_k = rng.uniform(25.0, 60.0), rng.uniform(2.0, 5.0), rng.uniform(8.0, 20.0)
        distance_deg = np.degrees(np.arccos(np.clip(vectors @ centre, -1.0, 1.0)))
        ridge = np.exp(-0.5 * ((distance_deg - radius_deg) / width_deg) ** 2)
        total += peak_k * ridge * (0.5 + 0.5 * (vectors @ bright)) ** 2
    return total


def _blobs_k(vectors: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.float64]:
    """A few compact sources near the plane, round and about a degree wide."""
    total = np.zeros(len(vectors))
    for _ in range(8):
        centre = _direction(rng, 20.0)
        size_rad, peak_k = math.radians(rng.uniform(0.6, 1.0)), math.exp(rng.uniform(math.log(200.0), math.log(2500.0)))
        total += peak_k * np.exp((vectors @ centre - 1.0) / size_rad**2)
    return total


def halo_k(nside: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Log-normal halo, K, so positive everywhere; its logarithm has the angular power law of synchrotron emission."""
    multipole = np.arange(_HALO_LMAX + 1)
    spectrum = np.zeros(multipole.size)
    spectrum[1:] = (multipole[1:] + 2.0) ** _HALO_POWER_INDEX
    spectrum *= 4.0 * np.pi * 0.22**2 / np.sum((2 * multipole + 1) * spectrum)
    return np.asarray(13.0 * np.exp(synthesised(spectrum, nside, rng)))


def _direction(rng: np.random.Generator, latitude_deg: float) -> NDArray[np.float64]:
    """Unit vector drawn evenly over the belt within `latitude_deg` of the plane."""
    longitude_rad = rng.uniform(0.0, 2.0 * np.pi)
    height = rng.uniform(-1.0, 1.0) * math.sin(math.radians(latitude_deg))
    across = math.sqrt(1.0 - height**2)
    return np.array([across * math.cos(longitude_rad), across * math.sin(longitude_rad), height])
