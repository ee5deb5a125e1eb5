"""Chromatic beams in closed form: short and finite dipoles, alone or over a conducting plane, and a Gaussian.

A beam here is a product of profiles, each a function of frequency and of the cosine to one
axis of the antenna. The engine tabulates the profiles at its nodes; everyone else asks for
`Beam.directivity`. Antenna frame: z is the boresight, x lies along a horizontal wire.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.config_beam import Dipole, FileBeam, GaussianBeam, ShortDipole
from sims.constants import SPEED_OF_LIGHT_M_PER_S
from sims.profile import cubic_table

Profile = Callable[[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64]]
"""Takes frequency_mhz[frequency] and cosine[point]; returns relative power[point, frequency]."""

X_AXIS = (1.0, 0.0, 0.0)
Z_AXIS = (0.0, 0.0, 1.0)
FEWEST_INTERVALS = 1024


ClosedForm = ShortDipole | Dipole | GaussianBeam


@dataclass(frozen=True)
class Ripple:
    """A standing wave on the structure: power times 1 + fraction cos(2 pi f / period + phase) cos(theta).

    Attributes
    ----------
    fraction : float
    period_mhz : float
        MHz.
    phase_rad : float
        Rad.
    """

    fraction: float
    period_mhz: float
    phase_rad: float

    @classmethod
    def of(cls, settings: ClosedForm | FileBeam) -> Ripple | None:
        """The ripple of a ``[beam]`` table; None where its fraction is zero."""
        if settings.ripple_fraction == 0.0:
            return None
        return cls(settings.ripple_fraction, settings.ripple_period_mhz, float(np.radians(settings.ripple_phase_deg)))

    def factor(self, frequency_mhz: NDArray[np.float64], cosine: NDArray[np.float64]) -> NDArray[np.float64]:
        """Factor on the power, ndarray[point, frequency], by the cosine of theta, ndarray[point]."""
        wave = self.fraction * np.cos(2.0 * np.pi * frequency_mhz / self.period_mhz + self.phase_rad)
        return np.asarray(1.0 + cosine[:, None] * wave)


@dataclass(frozen=True)
class Beam:
    """A beam as a product of profiles about axes of the antenna frame.

    Attributes
    ----------
    axes : ndarray[factor, 3]
        Unit vectors in the antenna frame.
    profiles : tuple of Profile
        One a factor; their product is the relative power pattern.
    mounting : ndarray[3, 3]
        Rotation from the antenna frame to the frame that the attitude points.
    efficiency : float
        Radiation efficiency, 0 to 1.
    structure_temperature_k : float
        Temperature of what absorbs the rest, K.
    """

    axes: NDArray[np.float64]
    profiles: tuple[Profile, ...]
    mounting: NDArray[np.float64]
    efficiency: float
    structure_temperature_k: float

    def relative_power(self, frequency_mhz: NDArray[np.float64], direction: NDArray[np.float64]) -> NDArray[np.float64]:
        """Pattern before normalisation.

        Parameters
        ----------
        frequency_mhz : ndarray[frequency]
            Frequency, MHz.
        direction : ndarray[point, 3]
            Unit vectors in the antenna frame.

        Returns
        -------
        ndarray[point, frequency]
        """
        power = np.ones((len(direction), len(frequency_mhz)))
        for axis, profile in zip(self.axes, self.profiles, strict=True):
            power *= profile(frequency_mhz, np.clip(direction @ axis, -1.0, 1.0))
        return power

    def directivity(self, frequency_mhz: NDArray[np.float64], direction: NDArray[np.float64]) -> NDArray[np.float64]:
        """Directivity D, whose integral over the sphere is 4 pi (Kraus, Radio Astronomy).

        Parameters
        ----------
        frequency_mhz : ndarray[frequency]
            Frequency, MHz.
        direction : ndarray[point, 3]
            Unit vectors in the antenna frame.

        Returns
        -------
        ndarray[point, frequency]
        """
        return np.asarray(self.relative_power(frequency_mhz, direction) / self._mean_power(frequency_mhz))

    def efficiency_at(self, frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
        """Radiation efficiency, ndarray[frequency]: the same at all frequencies."""
        return np.full(len(frequency_mhz), self.efficiency)

    def ground_share_at(self, frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
        """Share of the power lost in the ground, ndarray[frequency]: none, in closed form."""
        return np.zeros(len(frequency_mhz))

    def _mean_power(self, frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
        """Mean over the sphere; the two hemispheres apart, since a plane breaks the pattern between them."""
        x, weight = np.polynomial.legendre.leggauss(96)
        z = np.concatenate([0.5 * (x - 1.0), 0.5 * (x + 1.0)])
        z_weight = np.concatenate([weight, weight]) / 4.0
        azimuth = 2.0 * np.pi * np.arange(192) / 192
        rho = np.sqrt(1.0 - z**2)
        direction = np.stack(
            [np.outer(rho, np.cos(azimuth)), np.outer(rho, np.sin(azimuth)), np.repeat(z[:, None], 192, axis=1)],
            axis=-1,
        ).reshape(-1, 3)
        power = self.relative_power(frequency_mhz, direction).reshape(len(z), 192, -1).mean(axis=1)
        return np.asarray(z_weight @ power)


def beam_from(settings: ClosedForm) -> Beam:
    """Beam as configured.

    Parameters
    ----------
    settings : ShortDipole, Dipole or GaussianBeam
        The ``[beam]`` table.

    Returns
    -------
    Beam
    """
    axes, profiles = _rippled(*_factors(settings), Ripple.of(settings))
    return Beam(
        axes=np.array(axes),
        profiles=profiles,
        mounting=mounting_matrix(settings.tilt_deg, settings.tilt_azimuth_deg, settings.turn_deg),
        efficiency=settings.efficiency,
        structure_temperature_k=settings.structure_temperature_k,
    )


def mounting_matrix(tilt_deg: float, tilt_azimuth_deg: float, turn_deg: float) -> NDArray[np.float64]:
    """How the antenna sits in the frame that the attitude points.

    The antenna is first turned about the boresight by `turn_deg`, x towards y; then its
    boresight is tilted by `tilt_deg` towards `tilt_azimuth_deg`, counted from x towards y.

    Returns
    -------
    ndarray[3, 3]
        Rotation of antenna-frame vectors.
    """
    azimuth = np.radians(tilt_azimuth_deg)
    tilt = Rotation.from_rotvec(np.radians(tilt_deg) * np.array([-np.sin(azimuth), np.cos(azimuth), 0.0]))
    turn = Rotation.from_euler("z", turn_deg, degrees=True)
    return np.asarray((tilt * turn).as_matrix())


def wire_profile(length_m: float) -> Profile:
    """Power of a thin wire with sinusoidal current, against the cosine to the wire.

    ((cos(a u) - cos a) / sin)^2 with a = pi L / lambda (Kraus, Antennas), rewritten with
    products of sines so that nothing cancels at the ends, and scaled to 1 - u^2 for a short wire.
    """

    def power(frequency_mhz: NDArray[np.float64], cosine: NDArray[np.float64]) -> NDArray[np.float64]:
        a = np.pi * length_m * frequency_mhz * 1e6 / SPEED_OF_LIGHT_M_PER_S
        u = cosine[:, None]
        ends = np.sinc(a * (1.0 + u) / (2.0 * np.pi)) * np.sinc(a * (1.0 - u) / (2.0 * np.pi))
        return np.asarray((1.0 - u**2) * ends**2)

    return power


def plane_profile(height_m: float, wire: str) -> Profile:
    """Factor of a perfectly conducting plane below a wire, against the cosine to the zenith.

    The image theorem (Kraus, Antennas): sin^2(k h v) for a horizontal wire, here over
    (k h)^2, cos^2(k h v) for a vertical one; nothing below the plane.
    """

    def power(frequency_mhz: NDArray[np.float64], cosine: NDArray[np.float64]) -> NDArray[np.float64]:
        phase = 2.0 * np.pi * height_m * frequency_mhz * 1e6 / SPEED_OF_LIGHT_M_PER_S * cosine[:, None]
        over_plane = cosine[:, None] * np.sinc(phase / np.pi) if wire == "horizontal" else np.cos(phase)
        return np.where(cosine[:, None] > 0.0, over_plane**2, 0.0)

    return power


def gaussian_profile(width_deg: float, frequency_mhz: float, exponent: float) -> Profile:
    """Round Gaussian of full width at half power `width_deg` at `frequency_mhz`, falling as f^-exponent."""

    def power(frequency: NDArray[np.float64], cosine: NDArray[np.float64]) -> NDArray[np.float64]:
        width = np.radians(width_deg) * (frequency / frequency_mhz) ** -exponent
        return np.asarray(np.exp(-4.0 * np.log(2.0) * (np.arccos(cosine)[:, None] / width) ** 2))

    return power


def _short_profile(frequency_mhz: NDArray[np.float64], cosine: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.repeat(1.0 - cosine[:, None] ** 2, len(frequency_mhz), axis=1)


def _factors(settings: ClosedForm) -> tuple[list[tuple[float, float, float]], tuple[Profile, ...]]:
    """Axes and profiles; an antenna larger by the scale has the pattern of a wave shorter by it."""
    scale = settings.dimension_scale
    if isinstance(settings, ShortDipole):
        return [X_AXIS], (_short_profile,)
    if isinstance(settings, GaussianBeam):
        width = gaussian_profile(settings.width_deg, settings.frequency_mhz / scale, settings.width_exponent)
        return [Z_AXIS], (width,)
    wire_axis = X_AXIS if settings.wire == "horizontal" else Z_AXIS
    wire = wire_profile(scale * settings.length_m)
    if settings.height_m is None:
        return [wire_axis], (wire,)
    return [wire_axis, Z_AXIS], (wire, plane_profile(scale * settings.height_m, settings.wire))


def _rippled(
    axes: list[tuple[float, float, float]], profiles: tuple[Profile, ...], ripple: Ripple | None
) -> tuple[list[tuple[float, float, float]], tuple[Profile, ...]]:
    """The ripple taken into the profile about z, or as one of its own."""
    if ripple is None:
        return axes, profiles
    if Z_AXIS not in axes:
        return [*axes, Z_AXIS], (*profiles, ripple.factor)
    place = axes.index(Z_AXIS)
    smooth = profiles[place]

    def both(frequency_mhz: NDArray[np.float64], cosine: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(smooth(frequency_mhz, cosine) * ripple.factor(frequency_mhz, cosine))

    return axes, (*profiles[:place], both, *profiles[place + 1 :])


def beam_tables(beam: Beam, frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
    """Profiles of a beam tabulated for the engine's kernel.

    Parameters
    ----------
    beam : Beam
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.

    Returns
    -------
    ndarray[factor, interval, 4, frequency]
        Cubics in the cosine, all factors on the same intervals.
    """

    def tabulate(profile: Profile, intervals: int) -> NDArray[np.float64]:
        return cubic_table(lambda x: profile(frequency_mhz, x), -1.0, 1.0, tolerance=1e-12, intervals=intervals)

    tables = [tabulate(profile, FEWEST_INTERVALS) for profile in beam.profiles]
    most = max(table.shape[0] for table in tables)
    same = [
        table if table.shape[0] == most else tabulate(profile, most)
        for table, profile in zip(tables, beam.profiles, strict=True)
    ]
    return np.stack(same)
