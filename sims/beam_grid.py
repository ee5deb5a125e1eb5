r"""A tabulated beam: directivity towards any direction at any frequency of its band, and how far that may be off.

`sims.beam_spline` joins its directions, `sims.beam_smooth` its frequencies. Both are linear, so the beam is the table
times three matrices, taken at the engine's nodes only: a table of many frequencies is never copied.

Conventions, of this and of every beam
--------------------------------------
Antenna frame: right-handed, z the boresight, x along the reference axis (a horizontal wire).
Theta counts from z, 0 to 180 deg. Phi counts from x towards y, 0 to 360 deg; seen from the sky down on to the antenna,
counter-clockwise. A direction is where the radiation comes from (or, transmitting, goes to):

    n       = ( sin theta cos phi,  sin theta sin phi,   cos theta)
    e_theta = ( cos theta cos phi,  cos theta sin phi,  -sin theta)   the way theta grows
    e_phi   = (-sin phi,            cos phi,              0       )   the way phi grows

             z  boresight (theta = 0)
             |
             |          n
             |         /:
             | theta  / :          e_theta points away from the boresight.
             |- - . /   :          n x e_theta = e_phi: looking outwards along n,
             |    /     :          e_phi is a quarter turn clockwise from e_theta.
             |  /       :
             |/         :
             O----------:------------ y  (phi = 90)
            / \         :
           /    \       :
          /--.--- \     :
         /   phi    \   :
        /             \ :
       x                *  n seen from above, at phi from x
       (phi = 0: the reference axis, or the wire)

Fields are the factors of e_theta and e_phi; the power is |E_theta|^2 + |E_phi|^2. Phases carry exp(+j omega t).

Tilt and turn (`sims.beam.mounting_matrix`): the attitude points a frame whose z is the nominal boresight.
The antenna is first turned in it about z by turn_deg, x towards y; then the boresight is tilted by tilt_deg towards
the azimuth tilt_azimuth_deg, counted from that frame's x towards its y. So the turn does not move the direction of
the tilt. A vector v of the antenna frame is mounting @ v in the frame that is pointed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.beam import Ripple
from sims.beam_error import AngularError, AngularTable, joining_error, refuse_large
from sims.beam_smooth import FrequencySpline, frequency_spline
from sims.beam_spline import AngularSpline, angular_spline, evaluate_grid
from sims.errors import raise_if_any
from sims.far_field import FarField

FloatArray = NDArray[np.float64]
BATCH_FREQUENCIES = 32


@dataclass(frozen=True, eq=False)
class GridBeam:
    """A beam from a table.

    Attributes
    ----------
    table : FarField
    sphere : AngularSpline
    spline : FrequencySpline
    mean_power : ndarray[frequency]
        Mean over the sphere of the table as it was given, at its own frequencies.
    mounting : ndarray[3, 3]
        Rotation from the antenna frame to the frame that the attitude points.
    efficiency : float
        What the antenna radiates of what the table says it does: 1, or what the table leaves out.
    structure_temperature_k : float
        Temperature of what absorbs the rest, K.
    missing_power : str
        What the table's mean over the sphere lacks from 1: "efficiency", lost in the antenna;
        "ground-loss", in the ground; "numerical", an error of the table.
    ripple : Ripple or None
        A standing wave on the structure.
    """

    table: FarField
    sphere: AngularSpline
    spline: FrequencySpline
    mean_power: FloatArray
    mounting: FloatArray
    efficiency: float
    structure_temperature_k: float
    missing_power: str
    ripple: Ripple | None

    @property
    def axes(self) -> FloatArray:
        """The antenna frame's own axes, ndarray[3, 3], which the kernel wants on the sky."""
        return np.eye(3)

    @property
    def layout(self) -> FloatArray:
        """Start and scale of the table for the kernel, ndarray[5]: see `sims.beam_spline`."""
        return self.sphere.layout

    def node_table(self, frequency_mhz: FloatArray) -> FloatArray:
        """Spline coefficients of the directivity for the kernel, and so for every antenna temperature.

        Parameters
        ----------
        frequency_mhz : ndarray[frequency]
            Frequencies, MHz.

        Returns
        -------
        ndarray[theta cell + 3, phi cell + 3, frequency]
            C-contiguous; normalised so that the integral of the directivity over the sphere is 4 pi.

        Raises
        ------
        InputError
            If a frequency lies outside the tabulated band, or the directions are joined with too large an error there
            (`sims.beam_error.LARGEST_ERROR`).
        """
        self._refuse_large_errors(frequency_mhz)
        return self._coefficients(frequency_mhz)

    def _coefficients(self, frequency_mhz: FloatArray) -> FloatArray:
        return self.sphere.coefficients(self._directive(frequency_mhz))

    def _refuse_large_errors(self, frequency_mhz: FloatArray) -> None:
        rms = [
            self.error_estimate(frequency_mhz[start : start + BATCH_FREQUENCIES]).rms
            for start in range(0, len(frequency_mhz), BATCH_FREQUENCIES)
        ]
        directions = f"{len(self.table.theta_deg)} thetas and {len(self.table.phi_deg)} phis"
        refuse_large(np.concatenate([[], *rms]), frequency_mhz, directions, self.table.source)

    def directivity(self, frequency_mhz: FloatArray, direction: FloatArray) -> FloatArray:
        """Directivity D, whose integral over the sphere is 4 pi (Kraus, Radio Astronomy).

        Parameters
        ----------
        frequency_mhz : ndarray[frequency]
            Frequencies, MHz.
        direction : ndarray[point, 3]
            Unit vectors in the antenna frame.

        Returns
        -------
        ndarray[point, frequency]

        Raises
        ------
        InputError
            If a frequency lies outside the tabulated band.
        """
        values = np.empty((len(direction), len(frequency_mhz)))
        towards = np.ascontiguousarray(direction, dtype=np.float64)
        for start in range(0, len(frequency_mhz), BATCH_FREQUENCIES):
            some = slice(start, start + BATCH_FREQUENCIES)
            part = np.empty((len(direction), len(frequency_mhz[some])))
            evaluate_grid(self._coefficients(frequency_mhz[some]), self.layout, towards, part)
            values[:, some] = part
        return values

    def relative_power(self, frequency_mhz: FloatArray, direction: FloatArray) -> FloatArray:
        """Pattern on the scale of the table, before normalisation: ndarray[point, frequency]."""
        scale = self.spline.matrix(frequency_mhz) @ self.mean_power
        return self.directivity(frequency_mhz, direction) * scale

    def efficiency_at(self, frequency_mhz: FloatArray) -> FloatArray:
        """Radiation efficiency, ndarray[frequency]: times the radiated fraction where the antenna lost the rest."""
        if self.missing_power != "efficiency":
            return np.full(len(frequency_mhz), self.efficiency)
        return np.asarray(self.efficiency * self._radiated(frequency_mhz))

    def ground_share_at(self, frequency_mhz: FloatArray) -> FloatArray:
        """Share of the power lost in the ground, ndarray[frequency]."""
        if self.missing_power != "ground-loss":
            return np.zeros(len(frequency_mhz))
        return np.asarray(1.0 - self._radiated(frequency_mhz))

    def _radiated(self, frequency_mhz: FloatArray) -> FloatArray:
        return np.clip(self.spline.matrix(frequency_mhz) @ self.table.radiated_fraction, 0.0, 1.0)

    def error_estimate(self, frequency_mhz: FloatArray) -> AngularError:
        """Error of joining the directions, from the same table with every other direction left out.

        Parameters
        ----------
        frequency_mhz : ndarray[frequency]
            Frequencies, MHz.

        Returns
        -------
        AngularError
            See `sims.beam_error.joining_error`.
        """
        return joining_error(
            AngularTable(
                self.table.theta_deg, self.table.phi_deg, self._directive(frequency_mhz), self.sphere,
                self.table.upper_half,
            )
        )  # fmt: skip

    def _directive(self, frequency_mhz: FloatArray) -> FloatArray:
        pattern = self._pattern(frequency_mhz)
        pattern /= self.sphere.mean(pattern)[:, None, None]
        return pattern

    def _pattern(self, frequency_mhz: FloatArray) -> FloatArray:
        matrix = self.spline.matrix(frequency_mhz) / self.mean_power
        power = self.table.power
        pattern = np.asarray(matrix @ power.reshape(len(power), -1)).reshape(len(frequency_mhz), *power.shape[1:])
        if self.ripple is not None:
            pattern *= self.ripple.factor(frequency_mhz, np.cos(np.radians(self.table.theta_deg))).T[:, :, None]
        return pattern


def grid_beam(
    table: FarField,
    *,
    smoothing_mhz: float | None,
    mounting: FloatArray,
    efficiency: float,
    structure_temperature_k: float,
    missing_power: str = "efficiency",
    ripple: Ripple | None = None,
) -> GridBeam:
    """Beam from a table.

    Parameters
    ----------
    table : FarField
    smoothing_mhz : float or None
        Scale of the smoothing in frequency, MHz; None to go through every tabulated value.
    mounting : ndarray[3, 3]
        From `sims.beam.mounting_matrix`.
    efficiency : float
        What is lost beyond what the table says, 0 to 1.
    structure_temperature_k : float
        Temperature of what absorbs the rest, K.
    missing_power : str
        See `GridBeam`.
    ripple : Ripple or None
        A standing wave on the structure.

    Returns
    -------
    GridBeam

    Raises
    ------
    InputError
        If the grid is too coarse or incomplete, a frequency has no power, or nothing is left to smooth.
    """
    sphere = angular_spline(table.theta_deg, table.phi_deg, upper_half=table.upper_half)
    mean = sphere.mean(table.power)
    raise_if_any([
        f"{table.source}: the power at {frequency:g} MHz sums to {value:g} over the sphere; it must be positive"
        for frequency, value in zip(table.frequency_mhz, mean, strict=True)
        if not value > 0.0
    ])  # fmt: skip
    spline = frequency_spline(table.frequency_mhz, smoothing_mhz)
    return GridBeam(table, sphere, spline, mean, mounting, efficiency, structure_temperature_k, missing_power, ripple)
