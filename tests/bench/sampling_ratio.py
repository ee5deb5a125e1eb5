"""How many more effective draws a second come from the information form than from sampling every foreground number.

Run it as ``python tests/bench/sampling_ratio.py``. Both sides fit the same spectra: bins of a log-polynomial sky
with one trough. One side is the package's: foreground subtracted, the rest in the information form, the six numbers
of the trough sampled by `reduce.turning_points`; its time includes subtraction, annealing and the search for maxima.
The other samples all coefficients and the six numbers together by the stretch move of an ensemble sampler (Goodman and
Weare 2010, Commun. Appl. Math. Comput. Sci. 5, 65; emcee), its likelihood vectorised and compiled code where the
package's is, and is started from the answer: draws of the other side, with coefficients that belong to them.
Effective draws are ArviZ's, of the worst of the six numbers, for both.
"""

from __future__ import annotations

import argparse
import time
import warnings

import emcee
import numpy as np
from numpy.polynomial import legendre

from reduce.combine import Information, combine
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.subtract import Subtraction, subtract
from reduce.trough_model import NAMES, TroughModel, trough_model
from reduce.turning_points import BURN_IN_SHARE, sample_posterior
from sims.config import Point, PointPrior, TurningPoints

with warnings.catch_warnings():
    warnings.simplefilter("ignore", FutureWarning)
    import arviz

SETTINGS = TurningPoints(
    a=Point(frequency_mhz=17.0, temperature_mk=-42.0),
    e=Point(frequency_mhz=180.0, temperature_mk=0.0),
    b=PointPrior(frequency_mhz=(40.0, 58.0), temperature_mk=(-40.0, 10.0)),
    c=PointPrior(frequency_mhz=(55.0, 95.0), temperature_mk=(-300.0, -10.0)),
    d=PointPrior(frequency_mhz=(85.0, 120.0), temperature_mk=(-10.0, 60.0)),
    walkers=160,
    steps=1600,
)
TRUTH = np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0])
CHANNELS = 80
RESPONSE = 0.7
NOISE_K = 0.006  # at the middle of the band, rising with the sky


class Case:
    """Spectra of some bins, each a log polynomial of its own with the same trough."""

    def __init__(self, bins: int, terms: int, rng: np.random.Generator) -> None:
        self.frequency_mhz = np.linspace(40.5, 119.5, CHANNELS)
        self.model: TroughModel = trough_model(SETTINGS, self.frequency_mhz, np.ones(CHANNELS))
        x = np.log(self.frequency_mhz)
        self.legendre = legendre.legvander(2.0 * (x - x[0]) / (x[-1] - x[0]) - 1.0, terms - 1)
        self.coefficients = np.zeros((bins, terms))
        self.coefficients[:, 0] = np.log(1500.0) + rng.uniform(-0.3, 0.3, bins)
        self.coefficients[:, 1] = -1.37 + rng.uniform(-0.05, 0.05, bins)
        sky_k = np.exp(self.coefficients @ self.legendre.T)
        self.sigma_k = NOISE_K * sky_k / sky_k.mean()
        clean_k = sky_k + RESPONSE * self.model.signal_k(TRUTH)
        self.measured_k = clean_k + self.sigma_k * rng.standard_normal(sky_k.shape)

    def subtracted(self) -> tuple[Subtraction, Information]:
        """Foreground taken out, and the information form of the rest."""
        good = np.ones(self.measured_k.shape, bool)
        family = LogPolynomial(self.legendre.shape[1], self.frequency_mhz[0], self.frequency_mhz[-1])
        done = subtract(
            frequency_mhz=self.frequency_mhz, temperature_k=self.measured_k, noise_variance_k2=self.sigma_k**2,
            modes_k=np.zeros((*good.shape, 0)), good=good, family=family,
        )  # fmt: skip
        information = combine(
            residual_k=done.residual_k, covariance=done.covariance, basis=done.basis,
            signal_response=np.full(good.shape, RESPONSE), good=good, draws=None,
        )  # fmt: skip
        return done, information

    def log_probability(self, sets: np.ndarray) -> np.ndarray:
        """ln posterior ndarray[set] of all coefficients and the trough together."""
        result = np.full(len(sets), -np.inf)
        allowed = self.model.allowed(sets[:, : len(NAMES)])
        chosen = sets[allowed]
        coefficients = chosen[:, len(NAMES) :].reshape(-1, *self.coefficients.shape)
        model_k = np.exp(coefficients @ self.legendre.T)
        model_k += RESPONSE * self.model.signal_k(chosen[:, : len(NAMES)])[:, None, :]
        misfit = (self.measured_k - model_k) / self.sigma_k
        result[allowed] = -0.5 * np.einsum("sbc,sbc->s", misfit, misfit)
        return result

    def starts(self, done: Subtraction, troughs: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """Sets of all numbers: each trough with a draw of the coefficients that fit what it leaves."""
        weighted = done.basis / self.sigma_k.ravel()[:, None]
        axes, triangle = np.linalg.qr(weighted)
        left = (done.residual_k - RESPONSE * self.model.signal_k(troughs)[:, None, :]) / self.sigma_k
        right = left.reshape(len(troughs), -1) @ axes + rng.standard_normal((len(troughs), axes.shape[1]))
        shift = np.linalg.solve(triangle, right.T).T
        return np.concatenate([troughs, done.coefficients.ravel() + shift], axis=1)


def worst_effective(chains: np.ndarray) -> float:
    """Effective draws of the worst of the six numbers of ndarray[chain, draw, parameter]."""
    return min(float(arviz.ess(chains[:, :, number])) for number in range(len(NAMES)))


def explicit(case: Case, starts: np.ndarray, steps: int, rng: np.random.Generator) -> tuple[float, float]:
    """Effective draws and seconds of the sampler of all numbers."""
    sampler = emcee.EnsembleSampler(*starts.shape, case.log_probability, vectorize=True)
    state = emcee.State(starts, random_state=np.random.RandomState(int(rng.integers(2**32))).get_state())
    begun = time.perf_counter()
    sampler.run_mcmc(state, steps)
    seconds = time.perf_counter() - begun
    # Started from the answer it needs no time to find it: all of its steps count.
    return worst_effective(np.swapaxes(sampler.get_chain(), 0, 1)[:, :, : len(NAMES)]), seconds


def main() -> None:
    """Measure and print the ratio."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--bins", type=int, default=2)
    parser.add_argument("--terms", type=int, default=5)
    parser.add_argument("--walkers", type=int, default=64)
    parser.add_argument("--steps", type=int, default=40_000)
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args()
    rng = np.random.default_rng(arguments.seed)
    case = Case(arguments.bins, arguments.terms, rng)
    case.model.signal_k(TRUTH)  # compiled outside of both times
    begun = time.perf_counter()
    done, information = case.subtracted()
    posterior = sample_posterior(information, case.model, SETTINGS, rng, lambda steps: None)
    ours_s = time.perf_counter() - begun
    draws = posterior.stacked()
    ours = worst_effective(np.stack([posterior.samples[name].values for name in NAMES], axis=-1))
    starts = case.starts(done, draws[rng.choice(len(draws), arguments.walkers, replace=False)], rng)
    theirs, theirs_s = explicit(case, starts, arguments.steps, rng)
    kept = 1.0 - BURN_IN_SHARE
    print(f"{arguments.bins} bins of {arguments.terms} terms, {starts.shape[1]} numbers against {len(NAMES)}")
    print(f"information form   {ours:8.0f} effective draws in {ours_s:6.2f} s ({kept:.0%} of the steps kept)")
    print(f"all coefficients   {theirs:8.0f} effective draws in {theirs_s:6.2f} s, started from the answer")
    print(f"ratio              {ours / ours_s / (theirs / theirs_s):8.1f} in effective draws a second")


if __name__ == "__main__":
    main()
