"""The radio background behind the gas: the cosmic microwave background and, as an option, an excess over it.

`sims.hydrogen` takes it for the floor under every trough, the limits of `reduce` for all they say.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.constants import CMB_TEMPERATURE_K, LINE_21CM_MHZ
from sims.errors import raise_if_any

EXCESS_AT_MHZ = 78.0


@dataclass(frozen=True)
class RadioBackground:
    """Radio background of all the sky, as the gas sees it at the 21-cm line.

    The excess is a power law in frequency, T(f) = `excess_k` (f/78 MHz)^`index` as received today. All of it is taken
    to have been there at every redshift asked for, so that gas at z meets (1 + z) T(f_21/(1 + z)): the form of Feng
    and Holder 2018, ApJ 858, L17.

    Parameters
    ----------
    cmb_temperature_k : float
        Temperature of the cosmic microwave background today, K.
    excess_k : float
        Excess today at 78 MHz, K; 0 for none.
    index : float
        Temperature index of the excess; -2.6 is about that of the excess reported by Fixsen et al. 2011, ApJ 734, 5.

    Raises
    ------
    InputError
        If a number is not finite, the temperature is not above 0, the excess is negative, or the index is not
        below 0; lists each.
    """

    cmb_temperature_k: float = CMB_TEMPERATURE_K
    excess_k: float = 0.0
    index: float = -2.6

    def __post_init__(self) -> None:
        checks = (
            ("CMB temperature, K", self.cmb_temperature_k, self.cmb_temperature_k > 0, "above 0"),
            ("excess at 78 MHz, K", self.excess_k, self.excess_k >= 0, "0 or above"),
            ("index of the excess", self.index, self.index < 0, "below 0"),
        )
        raise_if_any(
            [
                f"radio background, {name}: {value:g} not allowed; it must be finite and {allowed}"
                for name, value, good, allowed in checks
                if not (good and math.isfinite(value))
            ]
        )

    def temperature_k(self, redshift: ArrayLike) -> NDArray[np.float64]:
        """Background at the 21-cm line, K, that gas at each redshift meets."""
        stretch = 1 + np.asarray(redshift, dtype=float)
        return np.asarray(self.cmb_temperature_k * stretch + self._excess_k(stretch))

    def log_slope(self, redshift: ArrayLike) -> NDArray[np.float64]:
        """dln T_R/dln(1 + z): 1 for the cosmic microwave background alone, 1 - `index` for the excess alone."""
        stretch = 1 + np.asarray(redshift, dtype=float)
        excess_k = self._excess_k(stretch)
        return np.asarray(1 - self.index * excess_k / (self.cmb_temperature_k * stretch + excess_k))

    def describe(self) -> str:
        """The background in words, for pages and products."""
        if self.excess_k == 0:
            return f"the cosmic microwave background alone, {self.cmb_temperature_k:g} K (1 + z)"
        return (
            f"the cosmic microwave background, {self.cmb_temperature_k:g} K (1 + z), and an EXCESS of "
            f"{self.excess_k:g} K today at {EXCESS_AT_MHZ:g} MHz with index {self.index:g}, older than the gas"
        )

    def _excess_k(self, stretch: NDArray[np.float64]) -> NDArray[np.float64]:
        received_mhz = LINE_21CM_MHZ / stretch
        return np.asarray(self.excess_k * (received_mhz / EXCESS_AT_MHZ) ** self.index * stretch)


CMB_ALONE = RadioBackground()
