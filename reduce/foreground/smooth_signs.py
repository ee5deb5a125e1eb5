"""Find the signs that the derivatives of a maximally smooth foreground keep, from the data.

For each pattern of signs the fit is a convex problem (`reduce.foreground.smooth_fit`); the patterns themselves,
2^(terms - 2) of them, are searched one sign at a time. Signs that were found are a freedom that no count of terms
shows: a distribution of chi-squared, or of what is left of a trough, has to be had from mocks that find their own.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from reduce.foreground.maximally_smooth import FREE_TERMS
from reduce.foreground.smooth_fit import SmoothDesign

FloatArray = NDArray[np.float64]

FALL = 1e-6  # of chi-squared: less is no reason to turn a sign


def _turned(signs: tuple[int, ...], place: int, above: bool) -> tuple[int, ...]:
    """Signs with one turned, or with it and all above it."""
    last = len(signs) if above else place + 1
    return tuple(-sign if place <= at < last else sign for at, sign in enumerate(signs))


def with_found_signs(design: SmoothDesign, temperature_k: FloatArray, most_turns: int = 20) -> SmoothDesign:
    """Let the signs of the derivatives be found, one pattern for all bins.

    From the signs of the family, a sign is turned, alone or with all above it, as long as chi-squared falls: first that
    of the order most firmly held. Each pattern is a convex problem, solved to its optimum; among patterns
    the search ends where no such turn helps, which need not be the best of all.

    Parameters
    ----------
    design : SmoothDesign
        Design, with the signs to begin with.
    temperature_k : ndarray[bin, channel]
        Data, K.
    most_turns : int
        Turns after which the search ends.

    Returns
    -------
    SmoothDesign
        With the signs found.

    Raises
    ------
    InputError, CertificateError
        As `SmoothDesign.fit`.
    """
    current, fit = design, design.fit(temperature_k)
    for _ in range(most_turns):
        firmness = -fit.multipliers.sum(axis=0)[FREE_TERMS:]
        held = [int(place) for place in np.argsort(-firmness, kind="stable") if firmness[place] > 0.0]
        for place, above in [(place, above) for place in held for above in (False, True)]:
            family = replace(current.family, signs=_turned(current.family.pattern, place, above))
            trial = replace(current, family=family)
            better = trial.fit(temperature_k)
            if better.chi_squared < fit.chi_squared * (1.0 - FALL):
                current, fit = trial, better
                break
        else:
            break
    return current
