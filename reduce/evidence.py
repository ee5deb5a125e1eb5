"""Evidence of a fitted foreground as a linear Gaussian model, of all rows or of some of them.

`reduce.compare` asks it for every fit of its table. The model of the good rows is y - mu = F d + U e + W s + n,
with n the noise, e the systematic modes at unit variance, d the shift of the foreground's free coefficients, and s
a trough of the prior. A free foreground has no evidence: here its coefficients have a prior (`coefficient_prior`).
F is the tangent at the fit, so a family that is not linear is taken to first order there (Laplace's method).

d and e are integrated out by one QR of the rows, with a row for each of their priors below; leaving rows out is
leaving them out of that QR. Normal equations never appear.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from reduce.combine import Information
from reduce.foreground.protocol import Family
from reduce.joint_fit import JointFit, covariance_modes_k
from reduce.quick_posterior import CompressedBank, QuickPosterior, quick_posterior
from reduce.trough_model import TroughModel

FloatArray = NDArray[np.float64]

DECAY = 3.0
COARSE_K = 2e-4  # rms, what a direction left out of cross-validation may hold of the prior's troughs
ENOUGH = 100.0  # effective draws: ln of an evidence is then good to 0.1


@dataclass(frozen=True, eq=False)
class CoefficientPrior:
    """Normal prior of each free coefficient.

    Parameters
    ----------
    mean, sd : ndarray[bin, term]
        In the units of the family's coefficients.
    """

    mean: FloatArray
    sd: FloatArray


def coefficient_prior(
    family: Family,
    frequency_mhz: FloatArray,
    temperature_k: FloatArray,
    good: NDArray[np.bool_],
    index: float,
) -> CoefficientPrior:
    """The stated prior of a free foreground.

    Parameters
    ----------
    family : Family
    frequency_mhz : ndarray[channel]
        Frequency, MHz.
    temperature_k : ndarray[bin, channel]
        Measured temperatures, K: each bin's level, and nothing else of them, is used.
    good : ndarray[bin, channel]
    index : float
        beta of the power law T ~ f^-beta that the prior is centred on.

    Returns
    -------
    CoefficientPrior
        Coefficient k, counted from 0, is normal about that of a power law of the bin's level, with a
        standard deviation of DECAY^-k in ln T, or of DECAY^-k levels for a linear family. So fall the
        Legendre coefficients of a function of size one that is analytic within an ellipse about the
        band whose half axes sum to DECAY half bands (Bernstein's theorem; Trefethen 2013, Approximation
        Theory and Approximation Practice, theorem 8.1).
    """
    middle_mhz = np.sqrt(frequency_mhz[0] * frequency_mhz[-1])
    slope = (frequency_mhz / middle_mhz) ** -index
    mean, level = np.zeros((len(good), family.terms)), np.ones((len(good), 1))
    for number, mask in enumerate(good):
        level[number] = np.mean(temperature_k[number, mask] / slope[mask])
        law_k = level[number] * slope
        mean[number] = family.start(frequency_mhz, law_k, np.ones_like(law_k))
    fall = DECAY ** -np.arange(family.terms, dtype=float)
    return CoefficientPrior(mean, fall * (np.abs(level) if family.linear else np.ones_like(level)))


@dataclass(frozen=True, eq=False)
class LinearModel:
    """Rows of the model in units of their noise.

    Parameters
    ----------
    nuisance : ndarray[row, column]
        Modes and free coefficients, each of unit prior variance.
    signal : ndarray[row, direction]
        Response to one kelvin along each direction that troughs have.
    data : ndarray[row]
        Data less the mean of the prior.
    log_sigma : ndarray[row]
        ln of the noise, K.
    directions : ndarray[direction, channel]
        Orthonormal.
    """

    nuisance: FloatArray
    signal: FloatArray
    data: FloatArray
    log_sigma: FloatArray
    directions: FloatArray

    def along(self, count: int) -> LinearModel:
        """The same with the first directions alone."""
        return replace(self, signal=self.signal[:, :count], directions=self.directions[:count])

    def information(self, rows: NDArray[np.bool_] | None = None) -> Information:
        """All that some of the rows say of a signal, foreground and modes integrated over their priors.

        Parameters
        ----------
        rows : ndarray[row], optional
            Which to use; all by default.

        Returns
        -------
        Information
            Its `log_constant` is that of the marginal likelihood; of a signal it knows the part along `directions`.
        """
        used = np.ones(len(self.data), bool) if rows is None else rows
        columns, along = self.nuisance.shape[1], self.signal.shape[1]
        whole = np.column_stack([self.nuisance[used], self.signal[used], self.data[used]])
        priors = np.eye(columns, whole.shape[1])
        triangle = np.asarray(np.linalg.qr(np.concatenate([whole, priors]), mode="r"))
        log_det = 2.0 * np.log(np.abs(np.diag(triangle[:columns, :columns]))).sum()
        seen = slice(columns, columns + along)
        root, z = triangle[seen, seen] @ self.directions, triangle[seen, -1]
        return Information(
            K=root.T @ root,
            b=root.T @ z,
            R=root,
            z=z,
            chi_squared_min=float(triangle[columns + along, -1] ** 2),
            degrees_of_freedom=int(used.sum()) - along,
            rows=int(used.sum()),
            nuisance_terms=0,
            log_det_covariance=float(2.0 * self.log_sigma[used].sum() + log_det),
            log_det_nuisance=0.0,
            draws=None,
        )


def linear_model(fit: JointFit, prior: CoefficientPrior, directions: FloatArray) -> LinearModel:
    """The linear model at a fit.

    Parameters
    ----------
    fit : JointFit
    prior : CoefficientPrior
        Of the bins that have data.
    directions : ndarray[direction, channel]
        Orthonormal; those that the prior's troughs have (`CompressedBank.directions`).

    Returns
    -------
    LinearModel
        Rows are the good (bin, channel) pairs in C order.
    """
    done = fit.subtraction
    good, sigma_k = done.good, done.covariance.sigma_k
    modes = covariance_modes_k(fit.spectra, fit.fiducial_signal_k)[good]
    free = done.basis * prior.sd.ravel()
    offset = (prior.mean - done.coefficients).ravel()
    reaching = (fit.spectra["signal_response"].values[:, :, None] * directions.T)[good]
    return LinearModel(
        nuisance=np.column_stack([free, modes]) / sigma_k[:, None],
        signal=reaching / sigma_k[:, None],
        data=(done.residual_k[good] - done.basis @ offset) / sigma_k,
        log_sigma=np.log(sigma_k),
        directions=directions,
    )


@dataclass(frozen=True, eq=False)
class Evidence:
    """ln of marginal likelihoods, data in kelvin.

    Parameters
    ----------
    trough : float
        With a trough, integrated over its prior.
    no_signal : float
        Without a signal.
    posterior : QuickPosterior
        Of the trough.
    """

    trough: float
    no_signal: float
    posterior: QuickPosterior


def evidence(information: Information, model: TroughModel, bank: CompressedBank, rng: np.random.Generator) -> Evidence:
    """Evidence of the rows that an information form was made of."""
    found = quick_posterior(information, model, bank, rng)
    none = information.log_constant - 0.5 * float(information.z @ information.z)
    return Evidence(information.log_constant + found.log_evidence, none, found)


def cross_validated(
    linear: LinearModel,
    groups: NDArray[np.int64],
    model: TroughModel,
    bank: CompressedBank,
    rng: np.random.Generator,
    whole: Evidence,
) -> FloatArray:
    """ln of the density with which the other rows predict those of each group.

    The draws of the whole posterior and of the bank, weighed anew, give the evidence of the other rows over that of
    all; where too few of them carry the weight, it is found from the start.

    Parameters
    ----------
    linear : LinearModel
    groups : ndarray[row]
        Number of the group of each row, from 0.
    model, bank, rng
        As in `evidence`.
    whole : Evidence
        Of all rows.

    Returns
    -------
    ndarray[group]
        ln p(rows of the group | all other rows), in ln of 1/K a row. NaN where a group is all there is.
    """
    coarse = linear.along(int((np.sqrt((bank.coordinates**2).mean(axis=0)) > COARSE_K).sum()))
    posterior = whole.posterior
    new = model.signal_k(posterior.parameters[len(bank.parameters) :]) @ coarse.directions.T
    coordinates = np.concatenate([bank.coordinates[:, : len(coarse.directions)], new])
    all_rows = coarse.information()
    log_all = _along(all_rows, coarse, coordinates)
    with np.errstate(divide="ignore"):
        log_weight = np.log(posterior.weight) - log_all
    found = np.full(int(groups.max()) + 1, np.nan)
    for number in range(len(found)):
        others = groups != number
        if not others.any():
            continue
        left = coarse.information(others)
        log_others = _along(left, coarse, coordinates)
        weighed = log_weight + log_others
        total = float(logsumexp(weighed))
        effective = np.exp(2.0 * total - float(logsumexp(2.0 * weighed)))
        carrying = np.isfinite(log_weight)
        # Draws without weight are beyond the reach of a double; none of them may fit the others best.
        if effective >= ENOUGH and log_others.max() <= log_others[carrying].max():
            found[number] = all_rows.log_constant - left.log_constant - total
        else:
            found[number] = whole.trough - evidence(linear.information(others), model, bank, rng).trough
    return found


def _along(information: Information, linear: LinearModel, coordinates: FloatArray) -> FloatArray:
    """-|R s - z|^2 / 2 ndarray[draw] of signals given by ndarray[draw, direction], K."""
    misfit = coordinates @ (information.R @ linear.directions.T).T - information.z
    return np.asarray(-0.5 * np.einsum("dr,dr->d", misfit, misfit))
