"""The card of a sky: what it is made of, and what it looks like over the band of a campaign.

Numbers only; `reduce.report.sky_page` writes them down and `reduce.report.sky_plot` draws them. Every value
comes from the sky that the engine would use.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.config import Config
from sims.config_sky import InventedSky
from sims.constants import BOLTZMANN_J_PER_K, CMB_TEMPERATURE_K, SPEED_OF_LIGHT_M_PER_S, rayleigh_jeans_k
from sims.sky import AnySky, DiffuseSky, JoinedSky, sky_from
from sims.sky_map_checks import Frame
from sims.sky_survey import MapNote

FloatArray = NDArray[np.float64]

SHOWN = 3
CURVE_POINTS = 129
AT_ONCE = 8
TERMS = (4, 5, 6, 7, 8)
STATED_TERMS = 6
STATED_MK = 2.0
PERCENTILES = (5.0, 50.0, 95.0)
# Half the step of ln f over which index and curvature are taken: errors of rounding (1e-15 / step^2)
# and of the fourth derivative (step^2) both stay below 1e-3 of a curvature of 0.1.
HALF_STEP = 0.02


@dataclass(frozen=True)
class Published:
    """A published spectrum of the sky.

    Attributes
    ----------
    name : str
        What it is of, short.
    source : str
        Where it stands.
    value_k : callable
        Brightness ndarray[frequency], K, at frequencies ndarray[frequency], MHz.
    """

    name: str
    source: str
    value_k: Callable[[FloatArray], FloatArray]


def galactic_noise_k(frequency_mhz: FloatArray) -> FloatArray:
    """Median galactic noise, K: F_am = 52 - 23 log10(f / MHz) dB over 290 K (ITU-R P.372-16, eq. 13)."""
    return np.asarray(290.0 * 10.0 ** (0.1 * (52.0 - 23.0 * np.log10(frequency_mhz))))


def polar_brightness_k(frequency_mhz: FloatArray) -> FloatArray:
    """Brightness towards the galactic poles, K, of Cane 1979, MNRAS 189, 465 (coefficients from memory).

    I_g f^-0.52 (1 - exp(-tau)) / tau + I_eg f^-0.80 exp(-tau), tau = 5 f^-2.1, with I_g = 2.48e-20 and
    I_eg = 1.06e-20 W m^-2 Hz^-1 sr^-1, f in MHz; as Rayleigh-Jeans brightness.
    """
    tau = 5.0 * frequency_mhz**-2.1
    galaxy = 2.48e-20 * frequency_mhz**-0.52 * -np.expm1(-tau) / tau
    intensity = galaxy + 1.06e-20 * frequency_mhz**-0.80 * np.exp(-tau)
    wavelength_m = SPEED_OF_LIGHT_M_PER_S / (1e6 * frequency_mhz)
    return np.asarray(intensity * wavelength_m**2 / (2.0 * BOLTZMANN_J_PER_K))


PUBLISHED = (
    Published("galactic noise, median", "ITU-R P.372-16 eq. 13, held to about 100 MHz", galactic_noise_k),
    Published("galactic poles", "Cane 1979, MNRAS 189, 465; from memory", polar_brightness_k),
)
# Index beta of T ~ f^-beta: range, of what, source. All three from memory.
PUBLISHED_INDICES = (
    ((2.1, 2.7), "45 to 408 MHz, over the sky", "Guzman et al. 2011, A&A 525, A138; from memory"),
    ((2.4, 2.6), "100 to 200 MHz, high latitudes", "Rogers and Bowman 2008, AJ 136, 641: 2.5 +- 0.1; from memory"),
    ((2.46, 2.59), "50 to 100 MHz, southern zenith", "Mozdzen et al. 2019, MNRAS 483, 4411; from memory"),
)


@dataclass(frozen=True)
class MapRow:
    """One map of the sky as it is used.

    Attributes
    ----------
    frequency_mhz : float
        MHz.
    note : MapNote
        What was done to it.
    lowest_k, mean_k, highest_k : float
        After zero level and scale, K, CMB included.
    margin_k : float
        How far the lowest pixel stands above the CMB, K.
    near_zero : int
        Pixels whose emission above the CMB is below a tenth of its median: a wrong zero level shows there first.
    misfit : float
        Largest |ln T| by which the join passes by a pixel.
    """

    frequency_mhz: float
    note: MapNote
    lowest_k: float
    mean_k: float
    highest_k: float
    margin_k: float
    near_zero: int
    misfit: float


@dataclass(frozen=True, eq=False)
class SkyCard:
    """What `sky_card` finds.

    Attributes
    ----------
    frame, nside
        Of the sky's pixels.
    rows : tuple of MapRow
    shown_mhz : ndarray[shown]
        Frequencies of the maps: the ends of the band and its middle in ln f.
    shown_k : ndarray[shown, pixel]
        Brightness there, K.
    index, curvature : ndarray[pixel]
        Of the brightness above the CMB at the middle: beta = -dlnT/dlnf, gamma = -d2lnT/dlnf2 / 2.
    frequency_mhz, mean_k : ndarray[frequency]
        Mean over the sphere over the band, K.
    quantile_k : ndarray[percentile, frequency]
        Of the pixels, `PERCENTILES`, K.
    mean_index, mean_curvature : float
        Of the mean spectrum above the CMB, at the middle.
    residual_mk : dict of int to ndarray[frequency]
        What a log polynomial of so many terms leaves of the mean, mK.
    """

    frame: Frame
    nside: int
    rows: tuple[MapRow, ...]
    shown_mhz: FloatArray
    shown_k: FloatArray
    index: FloatArray
    curvature: FloatArray
    frequency_mhz: FloatArray
    mean_k: FloatArray
    quantile_k: FloatArray
    mean_index: float
    mean_curvature: float
    residual_mk: dict[int, FloatArray]

    @property
    def middle_mhz(self) -> float:
        """Middle of the band in ln f, MHz."""
        return float(self.shown_mhz[SHOWN // 2])


def sky_card(config: Config) -> SkyCard:
    """Look at the sky of a campaign over its band.

    Parameters
    ----------
    config : Config

    Returns
    -------
    SkyCard

    Raises
    ------
    InputError
        With every problem of the sky.
    """
    sky = sky_from(config.sky)
    start, stop = config.channels.start_mhz, config.channels.stop_mhz
    shown = np.geomspace(start, stop, SHOWN)
    shown[[0, -1]] = start, stop
    frequency = np.geomspace(start, stop, CURVE_POINTS)
    frequency[[0, -1]] = start, stop
    mean_k, quantile_k = _over_the_band(sky, frequency)
    index, curvature = local_index(sky.brightness_k, shown[SHOWN // 2], start, stop)
    of_mean = local_index(lambda at: sky.mean_k(at)[np.newaxis], shown[SHOWN // 2], start, stop)
    return SkyCard(
        frame=sky.frame,
        nside=sky.nside,
        rows=_rows(sky, config),
        shown_mhz=shown,
        shown_k=np.ascontiguousarray(sky.brightness_k(shown).T),
        index=index,
        curvature=curvature,
        frequency_mhz=frequency,
        mean_k=mean_k,
        quantile_k=quantile_k,
        mean_index=float(of_mean[0][0]),
        mean_curvature=float(of_mean[1][0]),
        residual_mk={terms: log_polynomial_residual_mk(frequency, mean_k, terms) for terms in TERMS},
    )


def local_index(
    brightness_k: Callable[[FloatArray], FloatArray], at_mhz: float, lowest_mhz: float, highest_mhz: float
) -> tuple[FloatArray, FloatArray]:
    """Index and curvature of spectra above the CMB.

    Parameters
    ----------
    brightness_k : callable
        Brightness ndarray[pixel, frequency], K, CMB included.
    at_mhz : float
        Where, MHz.
    lowest_mhz, highest_mhz : float
        Frequencies that may be asked for, MHz.

    Returns
    -------
    tuple of ndarray[pixel]
        beta = -dlnT/dlnf and gamma = -d2lnT/dlnf2 / 2 by central differences over +-0.02 in ln f, less where
        the band is narrow; T ~ (f/f0)^-(beta + gamma ln(f/f0)) about that frequency.
    """
    step = min(HALF_STEP, 0.99 * np.log(at_mhz / lowest_mhz), 0.99 * np.log(highest_mhz / at_mhz))
    frequency = at_mhz * np.exp(step * np.array([-1.0, 0.0, 1.0]))
    logarithm = np.log(brightness_k(frequency) - rayleigh_jeans_k(CMB_TEMPERATURE_K, frequency))
    slope = (logarithm[:, 2] - logarithm[:, 0]) / (2.0 * step)
    bend = (logarithm[:, 2] - 2.0 * logarithm[:, 1] + logarithm[:, 0]) / step**2
    return -slope, -0.5 * bend


def log_polynomial_residual_mk(frequency_mhz: FloatArray, temperature_k: FloatArray, terms: int) -> FloatArray:
    """What a smooth foreground leaves of a spectrum.

    Parameters
    ----------
    frequency_mhz, temperature_k : ndarray[frequency]
        MHz and K; positive.
    terms : int
        Number of coefficients of the polynomial of ln T in ln f.

    Returns
    -------
    ndarray[frequency]
        Spectrum less fit, mK. The fit is least squares in ln T with the weight T, which to
        first order is least squares in kelvin.
    """
    x = np.log(frequency_mhz)
    scaled = 2.0 * (x - x.min()) / (x.max() - x.min()) - 1.0
    fit = np.polynomial.chebyshev.chebfit(scaled, np.log(temperature_k), terms - 1, w=temperature_k)
    return np.asarray(1e3 * (temperature_k - np.exp(np.polynomial.chebyshev.chebval(scaled, fit))))


def _over_the_band(sky: AnySky, frequency_mhz: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Mean and quantiles of the pixels, few frequencies at once."""
    means, quantiles = [], []
    for some in np.array_split(frequency_mhz, int(np.ceil(frequency_mhz.size / AT_ONCE))):
        brightness = sky.brightness_k(some)
        means.append(brightness.mean(axis=0))
        quantiles.append(np.percentile(brightness, PERCENTILES, axis=0))
    return np.concatenate(means), np.concatenate(quantiles, axis=1)


def _rows(sky: AnySky, config: Config) -> tuple[MapRow, ...]:
    if isinstance(sky, JoinedSky):
        misfit = sky.misfit()
        return tuple(
            _row(float(sky.maps.frequency_mhz[at]), note, sky.corrected_map_k(at), float(misfit[at]))
            for at, note in enumerate(sky.maps.notes)
        )
    return (_row(sky.frequency_mhz, _note(sky, config), sky.corrected_map_k(), 0.0),)


def _row(frequency_mhz: float, note: MapNote, map_k: FloatArray, misfit: float) -> MapRow:
    above = map_k - rayleigh_jeans_k(CMB_TEMPERATURE_K, frequency_mhz)
    return MapRow(
        frequency_mhz=frequency_mhz,
        note=note,
        lowest_k=float(map_k.min()),
        mean_k=float(map_k.mean()),
        highest_k=float(map_k.max()),
        margin_k=float(above.min()),
        near_zero=int(np.sum(above < 0.1 * np.median(above))),
        misfit=misfit,
    )


def _note(sky: DiffuseSky, config: Config) -> MapNote:
    read = sky.diffuse_map
    unit = "K" if isinstance(config.sky, InventedSky) else getattr(config.sky, "unit", "K")
    cells = f"{read.frame} image" if config.sky.kind == "image" else ""
    return MapNote(read.source, read.sha256, read.frame, unit, read.filled_pixels, cells)
