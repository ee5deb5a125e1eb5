"""The card of a beam: what the antenna is over the band of a campaign, and what its change with frequency costs.

Numbers only; `reduce.report.beam_page` writes them down and `reduce.report.beam_plot` draws them.
Every value comes from the beam that the engine would use. Antenna frame: theta from the
boresight, phi from the x axis.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.binning import mean_by_bin
from reduce.knowledge_modes import thinned
from sims.beam import Beam
from sims.beam_files import antenna_from
from sims.beam_grid import GridBeam
from sims.beam_smooth import roughness_k, thinned_error, undershoot
from sims.campaign import scene_of
from sims.config import Config
from sims.frequency import channel_grid
from sims.pixels import pixel_grid
from sims.sky import AnySky, sky_from
from sims.sky_average import evaluate
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]
ROWS = 9
SHOWN = (0, 4, 8)  # of the rows: the ends and the middle of the band
NSIDE = 64
HALF_STEP_MHZ = 0.05
CUT_STEP_DEG = 0.25
CURVE_POINTS = 161
TERMS = tuple(range(3, 12))
LEVELS_MK = (100.0, 10.0, 1.0)
PLANES_DEG = (0.0, 90.0)


@dataclass(frozen=True, eq=False)
class Table:
    """What is known of the table that a beam was read from.

    Attributes
    ----------
    source : str
        The files.
    notes : tuple of str
        What was put right.
    error_rms, error_largest : ndarray[row]
        Estimated error of joining the directions: over the pattern's rms, and over its peak.
    frequency_error : tuple of float or None
        The same of joining the frequencies; None for tables too short to tell.
    roughness_mhz, roughness_k : ndarray[frequency]
        What the smoothing took out, in kelvin of antenna temperature; zero without smoothing.
    undershoot : float
        How far below zero the joined power goes, over the peak.
    cross_polar : ndarray[row] or None
        Share of the power in the cross-polar component (Ludwig 1973, IEEE Trans. Antennas
        Propag. 21, 116, third definition, reference x) within the half-power beam.
    """

    source: str
    notes: tuple[str, ...]
    error_rms: FloatArray
    error_largest: FloatArray
    frequency_error: tuple[float, float] | None
    roughness_mhz: FloatArray
    roughness_k: FloatArray
    undershoot: float
    cross_polar: FloatArray | None


@dataclass(frozen=True, eq=False)
class BeamCard:
    """What `beam_card` finds.

    Attributes
    ----------
    frequency_mhz : ndarray[row]
        MHz.
    boresight_dbi, peak_dbi : ndarray[row]
        Directivity towards the boresight, and the largest, dBi.
    peak_deg : ndarray[row, 2]
        Theta and phi of the largest, deg.
    efficiency, ground_share : ndarray[row]
        Radiated of what went in; lost in the ground of that.
    width_deg : ndarray[row, plane]
        Between the half-power directions through the boresight, deg; NaN where the power does
        not fall to half.
    forward_share : ndarray[row]
        Of the power in the half of the boresight.
    front_to_back_db : ndarray[row]
        Largest directivity over that in the opposite direction, dB; infinite over a plane.
    solid_angle_sr : ndarray[row]
        4 pi over the largest directivity, sr.
    chromaticity_per_mhz : ndarray[row]
        Root mean square over the sphere of dD/df over that of D, 1/MHz.
    theta_deg : ndarray[cut]
        -180 to 180, deg: along phi for positive values, along phi + 180 for negative ones.
    cut_dbi : ndarray[shown, plane, cut]
        Directivity in the planes `PLANES_DEG`, dBi.
    change_per_mhz : ndarray[shown, pixel]
        dD/df on HEALPix pixels of the antenna frame, 1/MHz.
    curve_mhz : ndarray[point]
        Frequencies of the curves below, MHz.
    residual_mk : dict of int to ndarray[point]
        What a log polynomial of so many terms leaves of the antenna temperature, mK.
    table : Table or None
        None for closed forms.
    """

    frequency_mhz: FloatArray
    boresight_dbi: FloatArray
    peak_dbi: FloatArray
    peak_deg: FloatArray
    efficiency: FloatArray
    ground_share: FloatArray
    width_deg: FloatArray
    forward_share: FloatArray
    front_to_back_db: FloatArray
    solid_angle_sr: FloatArray
    chromaticity_per_mhz: FloatArray
    theta_deg: FloatArray
    cut_dbi: FloatArray
    change_per_mhz: FloatArray
    curve_mhz: FloatArray
    residual_mk: dict[int, FloatArray]
    table: Table | None

    def terms_below(self, level_mk: float) -> int | None:
        """Fewest terms whose residual stays under a level, mK rms; None where none of `TERMS` does."""
        return next((terms for terms in TERMS if np.std(self.residual_mk[terms]) < level_mk), None)


def beam_card(config: Config) -> BeamCard:
    """Judge the beam of a campaign.

    Parameters
    ----------
    config : Config

    Returns
    -------
    BeamCard

    Raises
    ------
    InputError
        If the beam or the sky cannot be read, or do not cover the band.
    """
    beam, sky = antenna_from(config.beam), sky_from(config.sky)
    start, stop = config.channels.start_mhz, config.channels.stop_mhz
    frequency = np.linspace(start, stop, ROWS)
    pixels = pixel_grid(NSIDE).directions
    directivity = beam.directivity(frequency, pixels).T
    change = _change(beam, frequency, pixels)
    peak = directivity.argmax(axis=1)
    boresight = beam.directivity(frequency, np.array([[0.0, 0.0, 1.0]]))[0]
    largest = np.maximum(directivity.max(axis=1), boresight)
    on_axis = boresight >= (1.0 - 1e-9) * directivity.max(axis=1)
    towards = np.where(on_axis[:, None], [0.0, 0.0, 1.0], pixels[peak])
    behind = np.array([beam.directivity(frequency[[n]], -towards[[n]])[0, 0] for n in range(ROWS)])
    theta_deg, cuts = _cuts(beam, frequency)
    curve_mhz, residual_mk = _smooth_foregrounds(config, sky)
    with np.errstate(divide="ignore"):
        return BeamCard(
            frequency_mhz=frequency,
            boresight_dbi=10.0 * np.log10(boresight),
            peak_dbi=10.0 * np.log10(largest),
            peak_deg=_angles_deg(towards),
            efficiency=beam.efficiency_at(frequency),
            ground_share=beam.ground_share_at(frequency),
            width_deg=np.array([[_width_deg(theta_deg, cut) for cut in row] for row in cuts]),
            forward_share=directivity @ (0.5 + 0.5 * np.sign(np.round(pixels[:, 2], 12))) / directivity.sum(axis=1),
            front_to_back_db=10.0 * np.log10(largest / np.maximum(behind, 0.0)),
            solid_angle_sr=4.0 * np.pi / largest,
            chromaticity_per_mhz=np.sqrt((change**2).mean(axis=1) / (directivity**2).mean(axis=1)),
            theta_deg=theta_deg,
            cut_dbi=10.0 * np.log10(np.maximum(cuts[list(SHOWN)], 0.0)),
            change_per_mhz=change[list(SHOWN)],
            curve_mhz=curve_mhz,
            residual_mk=residual_mk,
            table=_table(beam, sky, frequency) if isinstance(beam, GridBeam) else None,
        )


def _change(beam: Beam | GridBeam, frequency: FloatArray, directions: FloatArray) -> FloatArray:
    """dD/df, ndarray[row, direction], 1/MHz, by central differences within the band."""
    middle = np.clip(frequency, frequency[0] + HALF_STEP_MHZ, frequency[-1] - HALF_STEP_MHZ)
    upper, lower = (beam.directivity(middle + step, directions) for step in (HALF_STEP_MHZ, -HALF_STEP_MHZ))
    return np.asarray((upper - lower).T / (2.0 * HALF_STEP_MHZ))


def _angles_deg(directions: FloatArray) -> FloatArray:
    theta = np.degrees(np.arccos(np.clip(directions[:, 2], -1.0, 1.0)))
    phi = np.mod(np.degrees(np.arctan2(directions[:, 1], directions[:, 0])), 360.0)
    return np.stack([theta, np.where(theta < 1e-6, 0.0, phi)], axis=1)


def _cuts(beam: Beam | GridBeam, frequency: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Directivity in the principal planes: theta_deg[cut] and ndarray[row, plane, cut], linear."""
    theta_deg = np.arange(-180.0, 180.0 + CUT_STEP_DEG / 2.0, CUT_STEP_DEG)
    theta = np.radians(theta_deg)
    cuts = []
    for phi in np.radians(PLANES_DEG):
        towards = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=1)
        cuts.append(beam.directivity(frequency, towards).T)
    return theta_deg, np.stack(cuts, axis=1)


def _width_deg(theta_deg: FloatArray, cut: FloatArray) -> float:
    """Between the directions on either side of the boresight where the power has fallen to half, deg."""
    middle = len(theta_deg) // 2
    half = 0.5 * cut[middle]
    reached = []
    for side in (cut[middle:], cut[middle::-1]):
        below = np.flatnonzero(side < half)
        if not len(below):
            return float("nan")
        at = below[0]
        share = (side[at - 1] - half) / (side[at - 1] - side[at])
        reached.append((at - 1 + share) * CUT_STEP_DEG)
    return float(sum(reached))


def _smooth_foregrounds(config: Config, sky: AnySky) -> tuple[FloatArray, dict[int, FloatArray]]:
    """Residuals of log polynomials fitted to the mean antenna temperature of the campaign, mK."""
    geometry = thinned(survey_geometry(config.vantage, config.observation), config)
    edges = channel_grid(config.channels).edges_mhz
    curve_mhz = np.geomspace(edges[0], edges[-1], CURVE_POINTS)
    temperature, _ = evaluate(scene_of(config, sky, geometry), curve_mhz, lambda samples: None)
    mean_k = mean_by_bin(temperature, geometry, config.bins.model_copy(update={"by": "all", "count": 1}))[0]
    x = np.log(curve_mhz / np.sqrt(edges[0] * edges[-1])) / (0.5 * np.log(edges[-1] / edges[0]))
    residual_mk = {}
    for terms in TERMS:
        fitted = np.polynomial.Chebyshev.fit(x, np.log(mean_k), terms - 1)(x)
        residual_mk[terms] = 1e3 * (mean_k - np.exp(fitted))
    return curve_mhz, residual_mk


def _table(beam: GridBeam, sky: AnySky, frequency: FloatArray) -> Table:
    table = beam.table
    error = beam.error_estimate(frequency)
    inside = np.clip(table.frequency_mhz, sky.valid_from_mhz, sky.valid_to_mhz)
    rough = roughness_k(
        beam.spline, table.power, table.theta_deg, table.phi_deg, beam.sphere, np.asarray(sky.mean_k(inside))
    )
    return Table(
        source=table.source,
        notes=table.notes,
        error_rms=error.rms,
        error_largest=error.largest,
        frequency_error=thinned_error(table.frequency_mhz, table.power, beam.sphere),
        roughness_mhz=rough.frequency_mhz,
        roughness_k=rough.temperature_k,
        undershoot=float(undershoot(beam.spline, table.power, frequency).max()),
        cross_polar=_cross_polar(beam, frequency),
    )


def _cross_polar(beam: GridBeam, frequency: FloatArray) -> FloatArray | None:
    """Cross-polar share of the power within half of the peak, at the tabulated frequency nearest to each row."""
    table = beam.table
    if table.e_theta is None or table.e_phi is None:
        return None
    phi = np.radians(table.phi_deg)
    weight = np.sin(np.radians(table.theta_deg))[:, None]
    shares = []
    for value in frequency:
        nearest = int(np.argmin(np.abs(table.frequency_mhz - value)))
        crossed = np.abs(table.e_theta[nearest] * np.sin(phi) + table.e_phi[nearest] * np.cos(phi)) ** 2
        power = table.power[nearest]
        strong = power >= 0.5 * power.max()
        shares.append(float((weight * crossed)[strong].sum() / (weight * power)[strong].sum()))
    return np.array(shares)
