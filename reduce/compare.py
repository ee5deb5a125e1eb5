"""How much is enough: one set of spectra fitted with many foregrounds, and what each choice does to the answer.

`candidates` lists them, `compare` fits each and has it judged (`reduce.judge`), `marked` applies the default rule; the
choice is the user's. `reduce.report.compare_page` observes or reads the spectra, and writes the table down.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import get_args

import numpy as np
import xarray as xr

from reduce.foreground.known import KnownForeground
from reduce.joint_fit import joint_fit
from reduce.judge import Judged, judged
from reduce.quick_posterior import compressed_bank
from reduce.subtract import ConvergenceError
from reduce.trough_model import NAMES, TroughModel
from sims.config import Foreground
from sims.config_reduction import FamilyName
from sims.errors import InputError, raise_if_any
from sims.streams import stream

TERMS = tuple(range(4, 11))
PROCESS = {"amplitude": 1e-3, "length": 0.5}
PROCESS_TERMS = (5,)
COUNTED: dict[str, tuple[int, ...]] = {
    "log-polynomial": TERMS,
    "power-series": TERMS,
    "galaxy-ionosphere": TERMS,
    "gaussian-process": PROCESS_TERMS,
}
"""Families whose free terms are counted, and how many of them are tried where nobody says."""

SMALLEST_CHANCE = 0.05
STILL = 0.5  # of C's own error
SCATTER = 2.0  # times what chance moves C by


def candidates(
    families: Sequence[str] | None,
    terms: Sequence[int] | None,
    configured: Foreground,
    *,
    ensemble: bool,
) -> list[Foreground]:
    """The foregrounds to be compared.

    Parameters
    ----------
    families : sequence of str or None
        Names; all that can be by default.
    terms : sequence of int or None
        Numbers of terms of the families that count them; by default those of `COUNTED`.
    configured : Foreground
        What the campaign itself is fitted with: part of the default list, and where options of a family come from.
    ensemble : bool
        Whether an ensemble is there.

    Returns
    -------
    list of Foreground
        Family after family, terms rising.

    Raises
    ------
    InputError
        If a name is unknown, or numbers of terms make no family.
    """
    names = [*COUNTED, *(["ensemble"] if ensemble else [])] if families is None else list(dict.fromkeys(families))
    problems = [
        f"--families: {name!r} is unknown; allowed are {', '.join(get_args(FamilyName))}"
        for name in names
        if name not in get_args(FamilyName)
    ]
    if "ensemble" in names and not ensemble:
        problems.append("--families: ensemble.nc is not there; it is drawn where foreground.family is 'ensemble'")
    raise_if_any(problems)
    found: list[Foreground] = []
    for name in names:
        if name not in COUNTED:
            found.append(configured if configured.family == name else Foreground(family="ensemble", draws=50))
            continue
        given = {key: getattr(configured, key) for key in ("index", "amplitude", "length")}
        given = {key: value for key, value in given.items() if configured.family == name and value is not None}
        options = {**(PROCESS if name == "gaussian-process" else {}), **given}
        for count in COUNTED[name] if terms is None else terms:
            try:
                found.append(Foreground.model_validate({"family": name, "terms": count, **options}))
            except ValueError as error:
                problems.append(f"--terms: {count} for {name}: {_plain(error)}")
    raise_if_any(problems)
    if families is None and terms is None and configured not in found and configured.family in COUNTED:
        found.append(configured)
    return sorted(found, key=lambda each: ([*names, each.family].index(each.family), each.free_terms))


def compare(
    spectra: xr.Dataset,
    tried: Sequence[Foreground],
    model: TroughModel,
    seed: int,
    ensemble: tuple[KnownForeground, xr.Dataset] | None,
    advance: Callable[[int], None],
) -> list[Judged]:
    """Fit and judge every candidate.

    Parameters
    ----------
    spectra : xarray.Dataset
        `sims.schema.SPECTRA`.
    tried : sequence of Foreground
        From `candidates`.
    model : TroughModel
    seed : int
        Of the campaign.
    ensemble : tuple of KnownForeground and xarray.Dataset, or None
        With the spectra that go with it: without the modes that it draws itself.
    advance : callable
        Told of every candidate done.

    Returns
    -------
    list of Judged
        In the same order; those that could not be fitted say why.
    """
    bank = compressed_bank(model, stream(seed, "compare/bank"))
    found = []
    for settings in tried:
        rng = stream(seed, f"compare/{settings.family}/{settings.free_terms}")
        known, data = (None, spectra) if settings.family != "ensemble" or ensemble is None else ensemble
        try:
            fit = joint_fit(data, settings, model, rng, known, bank)
            found.append(judged(fit, settings, model, bank, rng))
        except (ConvergenceError, InputError) as error:
            found.append(Judged(settings, problem="; ".join(getattr(error, "problems", [str(error)]))))
        advance(1)
    return found


def still_beyond(row: Judged, rows: Sequence[Judged]) -> bool | None:
    """Whether C stands still, in frequency and in temperature, with the next larger number of terms of the family.

    Terms that are not needed leave C where it is, but for noise: the difference of the two has the variance by
    which that of C grows (Hausman 1978, Econometrica 46, 1251). So C stands still if it moves by less than `STILL` of
    its own error, or by less than `SCATTER` times the root of what the variance gained.

    Returns
    -------
    bool or None
        None where no larger number was fitted.
    """
    beyond = [each for each in rows if each.fitted and each.family == row.family and each.terms > row.terms]
    if not beyond:
        return None
    following = min(beyond, key=lambda each: each.terms)
    of_c = [NAMES.index("frequency_c_mhz"), NAMES.index("temperature_c_mk")]
    gained = np.sqrt(np.maximum(following.sd**2 - row.sd**2, 0.0))
    allowed = np.maximum(STILL * row.sd, SCATTER * gained)
    return bool((np.abs(following.mean - row.mean) < allowed)[of_c].all())


def marked(rows: Sequence[Judged]) -> int | None:
    """The row that the default rule marks; None if none passes.

    In each family the fewest terms with a chi-squared of the best trough that noise exceeds in more than 5 % of
    cases, and from which one step to more terms leaves C still (`still_beyond`). A family fitted with one number of
    terms must pass the first condition alone. Of the families' rows the one of the largest evidence.
    """
    firsts = []
    for family in dict.fromkeys(row.family for row in rows):
        own = sorted(
            (n for n, row in enumerate(rows) if row.family == family and row.fitted), key=lambda n: rows[n].terms
        )
        alone = len(own) == 1
        passing = [
            n for n in own if rows[n].chance > SMALLEST_CHANCE and (alone or still_beyond(rows[n], rows) is True)
        ]
        firsts += passing[:1]
    return max(firsts, key=lambda n: rows[n].log_evidence) if firsts else None


def _plain(error: ValueError) -> str:
    return " ".join(str(error).split("\n")[-2:]).split("[type=")[0].removeprefix("  Value error, ").strip()
