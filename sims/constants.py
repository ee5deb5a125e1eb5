"""Physical and lunar constants, a source on each line; the rest of the flow takes its numbers from here."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

PLANCK_J_S = 6.62607015e-34  # SI Brochure, 9th edition (exact)
BOLTZMANN_J_PER_K = 1.380649e-23  # SI Brochure, 9th edition (exact)
SPEED_OF_LIGHT_M_PER_S = 299_792_458.0  # SI Brochure, 9th edition (exact)
FREE_SPACE_IMPEDANCE_OHM = 376.730313412  # CODATA 2022

LINE_21CM_MHZ = 1420.405751768  # hydrogen hyperfine frequency; Furlanetto, Oh and Briggs 2006, Phys. Rep. 433
EINSTEIN_A10_PER_S = 2.8843e-15  # spontaneous rate of the 21-cm line; Furlanetto, Oh and Briggs 2006
CMB_TEMPERATURE_K = 2.7255  # Fixsen 2009, ApJ 707, 916

MOON_GM_KM3_PER_S2 = 4902.800  # DE421; Wieczorek 2015, Treatise on Geophysics 10.05
MOON_J2 = 2.0321e-4  # unnormalised, at MOON_J2_RADIUS_KM; GRAIL fields, e.g. Lemoine et al. 2014 (from memory)
MOON_J2_RADIUS_KM = 1738.0  # reference radius of the GRAIL gravity fields (from memory)
MOON_MEAN_RADIUS_KM = 1737.4  # NASA Moon fact sheet
MOON_ROTATION_DEG_PER_DAY = 13.17635815  # mean, sidereal; IAU rotation model, Archinal et al. 2018 (from memory)
EARTH_ROTATION_RAD_PER_S = 7.292115e-5  # nominal mean angular velocity; IERS Conventions 2010, table 1.2
EARTH_GM_KM3_PER_S2 = 398_600.4418  # with the atmosphere; IERS Conventions 2010, table 1.1
EARTH_EQUATORIAL_RADIUS_KM = 6378.137  # WGS 84
SUN_RADIUS_KM = 695_700.0  # nominal, photosphere; IAU 2015 Resolution B3
AU_KM = 149_597_870.7  # IAU 2012 Resolution B2 (exact)


def rayleigh_jeans_k(temperature_k: ArrayLike, frequency_mhz: ArrayLike) -> NDArray[np.float64]:
    """Rayleigh-Jeans brightness of a black body.

    Parameters
    ----------
    temperature_k : array_like[...]
        Physical temperature, K; positive.
    frequency_mhz : array_like[...]
        Frequency, MHz; broadcast against `temperature_k`.

    Returns
    -------
    ndarray[...]
        Brightness temperature, K: x T / (exp(x) - 1) with x = h f / (k T)
        (from Planck's law).
    """
    temperature = np.asarray(temperature_k, dtype=float)
    quantum_k = PLANCK_J_S * np.asarray(frequency_mhz, dtype=float) * 1e6 / BOLTZMANN_J_PER_K
    return np.asarray(quantum_k / np.expm1(quantum_k / temperature))
