"""The bundle that turning points and external fitters take, and the combined spectrum as text.

The information form is all of the data's say on a signal common to the sky: for any s(f),
ln L(s) = -|R s - z|^2 / 2 + const, with every bin, the covariance and the foreground in it.
"""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.combine import Information, projected_spectrum
from reduce.joint_fit import JointFit
from sims.schema import BUNDLE, describe

FloatArray = NDArray[np.float64]

INFORMATION_NUMBERS = (
    "chi_squared_min",
    "degrees_of_freedom",
    "rows",
    "nuisance_terms",
    "log_det_covariance",
    "log_det_nuisance",
)
DRAWN_ERROR_K = 1.0


def bundle(fit: JointFit) -> xr.Dataset:
    """Pack a joint fit.

    Parameters
    ----------
    fit : JointFit

    Returns
    -------
    xarray.Dataset
        `sims.schema.BUNDLE`, of the bins that have data.
    """
    subtraction, information = fit.subtraction, fit.information
    packed = fit.spectra.assign(
        foreground_k=(("bin", "channel"), subtraction.foreground_k),
        residual_k=(("bin", "channel"), subtraction.residual_k),
        foreground_modes=(("bin", "term", "channel"), _modes(fit)),
        signal_left_k=(("bin", "channel"), fit.removed.left_k),
        fiducial_signal_k=("channel", fit.fiducial_signal_k),
        K=(("channel", "channel_2"), information.K),
        b=("channel", information.b),
        R=(("rank", "channel"), information.R),
        z=("rank", information.z),
    )
    packed.attrs = {
        **fit.spectra.attrs,
        **{name: getattr(information, name) for name in INFORMATION_NUMBERS},
        "foreground_chi_squared": subtraction.chi_squared,
        "foreground_degrees_of_freedom": subtraction.degrees_of_freedom,
        "foreground_iterations": subtraction.iterations,
        "foreground_condition_number": subtraction.condition_number,
        "foreground_known_modes": fit.known_modes,
        "fiducial_rounds": fit.rounds,
        "fiducial_at_rest": int(fit.at_rest),
        "signal_surviving_fraction": fit.removed.surviving_fraction,
        "bins_with_data": [int(number) for number in fit.bins],
        "covariance_draws": 0 if information.draws is None else information.draws,
    }
    return describe(packed, BUNDLE)


def information_from(packed: xr.Dataset) -> Information:
    """The information form of a bundle."""
    numbers, draws = packed.attrs, int(packed.attrs["covariance_draws"])
    return Information(
        K=packed["K"].values,
        b=packed["b"].values,
        R=packed["R"].values,
        z=packed["z"].values,
        chi_squared_min=float(numbers["chi_squared_min"]),
        degrees_of_freedom=int(numbers["degrees_of_freedom"]),
        rows=int(numbers["rows"]),
        nuisance_terms=int(numbers["nuisance_terms"]),
        log_det_covariance=float(numbers["log_det_covariance"]),
        log_det_nuisance=float(numbers["log_det_nuisance"]),
        draws=draws or None,
    )


def combined_spectrum_text(packed: xr.Dataset) -> str:
    """The projected spectrum as a table of plain text.

    Parameters
    ----------
    packed : xarray.Dataset
        A bundle.

    Returns
    -------
    str
        Frequency, brightness, standard deviation; the header says what it is not good for.
    """
    spectrum = projected_spectrum(information_from(packed), DRAWN_ERROR_K)
    sigma = np.sqrt(np.diag(spectrum.covariance_k2))
    lines = ["# INVENTED sky and campaign: true of no sky."] if packed.attrs.get("sky") == "invented" else []
    lines += [
        "# Signal common to all bins, projected: for looking at, not to be fitted.",
        f"# Drawn are {spectrum.kept} of {spectrum.directions} directions: known to {DRAWN_ERROR_K:g} K or better;",
        "# the others, which the foreground model imitates, are set to zero. Errors are correlated.",
        "# To fit a signal s(f) use R and z of bundle.nc: ln L = -|R s - z|^2 / 2 + const.",
        "# frequency_mhz  temperature_k  sigma_k",
    ]
    lines += [
        f"{f:15.6f}  {t:13.6e}  {s:12.6e}"
        for f, t, s in zip(packed["frequency_mhz"].values, spectrum.spectrum_k, sigma, strict=True)
    ]
    return "\n".join(lines) + "\n"


def _modes(fit: JointFit) -> FloatArray:
    """Tangent of the foreground, ndarray[bin, term, channel]; NaN where flagged."""
    subtraction = fit.subtraction
    bins, terms = subtraction.coefficients.shape
    modes = np.full((bins, terms, subtraction.good.shape[1]), np.nan)
    row = 0
    for number, mask in enumerate(subtraction.good):
        rows = slice(row, row + int(mask.sum()))
        modes[number][:, mask] = subtraction.basis[rows, number * terms : (number + 1) * terms].T
        row = rows.stop
    return modes
