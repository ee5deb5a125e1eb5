"""The page and the table of a comparison of foregrounds, as text; `reduce.report.compare_page` writes them."""

from __future__ import annotations

import csv
import io
import math
import textwrap
from collections.abc import Sequence

from reduce.compare import SCATTER, SMALLEST_CHANCE, STILL, marked
from reduce.evidence import DECAY
from reduce.judge import BLOCKS, Judged, probability
from reduce.report.facts import invented, true_points
from reduce.runner import Products
from reduce.trough_model import NAMES, POINTS
from reduce.whiteness import NOISE_DRAWS
from sims.config import FitConfig

COLUMNS = 120
ENOUGH_DRAWS = 100.0
MOST_DIGITS, MOST_RATIO = 9999.5, 9.9995  # beyond them a column would overflow


def label(row: Judged) -> str:
    """Family and terms, as a person says them."""
    return f"{row.family} {row.terms}" if row.terms else row.family


def compare_csv(rows: Sequence[Judged]) -> str:
    """The whole table, one foreground a line, numbers in full."""
    chosen = marked(rows)
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    lines = [_cells(row) | {"marked": "yes" if number == chosen else ""} for number, row in enumerate(rows)]
    writer.writerow(lines[0])
    writer.writerows([_csv_number(value) for value in line.values()] for line in lines)
    return text.getvalue()


def _cells(row: Judged) -> dict[str, object]:
    nan = float("nan")
    runs, lag = (row.white.runs, row.white.lag_one) if row.white else (None, None)
    points = {f"{name}_{what}": float(value) for what, values in (("mean", row.mean), ("sd", row.sd))
              for name, value in zip(NAMES, values, strict=True)}  # fmt: skip
    return {
        "family": row.family,
        "terms": row.terms,
        "chi_squared_any_signal": row.chi_squared_any,
        "freedom_any_signal": row.freedom_any,
        "probability_any_signal": probability(row.chi_squared_any, row.freedom_any),
        "chi_squared_best_trough": row.chi_squared_trough,
        "freedom_best_trough": row.freedom_trough,
        "probability_best_trough": row.chance,
        "chi_squared_no_signal": row.chi_squared_none,
        "freedom_no_signal": row.freedom_none,
        "probability_no_signal": probability(row.chi_squared_none, row.freedom_none),
        "aic": row.aic,
        "bic": row.bic,
        "log_evidence_trough": row.log_evidence,
        "log_evidence_no_signal": row.log_evidence_none,
        "log_density_channels_left_out": row.predicted_channels,
        "log_density_bins_left_out": row.predicted_bins,
        "runs": runs.value if runs else nan,
        "runs_expected": runs.expected if runs else nan,
        "runs_error": runs.error if runs else nan,
        "lag_one": lag.value if lag else nan,
        "lag_one_expected": lag.expected if lag else nan,
        "lag_one_error": lag.error if lag else nan,
        "whitened_chi_squared": row.white.chi_squared if row.white else nan,
        **points,
        "signal_surviving": row.surviving,
        "effective_draws": row.effective,
        "condition_number": row.condition_number,
        "dynamic_range": row.dynamic_range,
        "problem": row.problem,
    }


def _csv_number(value: object) -> object:
    if isinstance(value, float):
        return "" if math.isnan(value) else f"{value:.8g}"
    return value


def compare_page(rows: Sequence[Judged], products: Products, config: FitConfig) -> str:
    """The page: the table in two halves, what each column means, and the rule."""
    chosen = marked(rows)
    lines = [f"How much foreground is enough: {config.run.name}"]
    if invented(products, config):
        lines.append("INVENTED: the sky and the campaign are made up. What stands here is true of no sky.")
    lines += ["", *_criteria(rows, chosen), *_truth_line(products, config)]
    lines += ["", *_residuals(rows, chosen), *_failures(rows)]
    lines += ["", "What stands in the columns", *_wrapped(_columns()), "", "The rule", *_wrapped(_rule(rows, chosen))]
    return "\n".join(lines)


def _criteria(rows: Sequence[Judged], chosen: int | None) -> list[str]:
    fitted = [row for row in rows if row.fitted]
    best = {
        name: pick(getattr(row, name) for row in fitted)
        for name, pick in (
            ("aic", min), ("bic", min), ("log_evidence", max), ("predicted_channels", max), ("predicted_bins", max),
        )
    }  # fmt: skip
    lines = [
        "                         chi-squared over freedom, chance of more         over            ln, under the best"
        "     what it does to C",
        "  foreground               any signal   best trough     no signal      AIC     BIC   evid. channels    bins"
        "     MHz             mK",
    ]
    for number, row in enumerate(rows):
        if not row.fitted:
            continue
        fits = (
            (row.chi_squared_any, row.freedom_any), (row.chi_squared_trough, row.freedom_trough),
            (row.chi_squared_none, row.freedom_none),
        )  # fmt: skip
        squares = "  ".join(f"{_ratio(value, freedom):>12}" for value, freedom in fits)
        lines.append(
            f"{_mark(number, chosen)}{label(row):21}{squares}{_over(row.aic - best['aic']):>9}"
            f"{_over(row.bic - best['bic']):>8}{_over(row.log_evidence - best['log_evidence']):>8}"
            f"{_over(row.predicted_channels - best['predicted_channels']):>9}"
            f"{_over(row.predicted_bins - best['predicted_bins']):>8}  {_point(row, 'C')}"
        )
    return lines


def _ratio(value: float, freedom: int) -> str:
    if freedom <= 0:
        return "-"
    ratio = value / freedom
    return f"{ratio:{'.3f' if ratio < MOST_RATIO else '.4g'}} {_chance(probability(value, freedom))}"


def _chance(value: float) -> str:
    return f"{value:5.1%}" if value >= 0.0005 else "<0.1%"


def _over(value: float) -> str:
    if math.isnan(value):
        return "-"
    return f"{value:.1f}" if abs(value) < MOST_DIGITS else f"{value:.2g}"


def _point(row: Judged, name: str) -> str:
    """Frequency, MHz, and temperature, mK, of a turning point, with errors."""
    at = POINTS.index(name)
    few = "?" if row.effective < ENOUGH_DRAWS else " "
    return f"{row.mean[at]:6.2f} ±{row.sd[at]:5.2f}{few}{row.mean[at + 3]:7.1f} ±{row.sd[at + 3]:5.1f}"


def _truth_line(products: Products, config: FitConfig) -> list[str]:
    truth = true_points(products, config)
    if truth is None:
        return []
    words = ", ".join(f"{name} {values[0]:.2f} MHz {values[1]:.1f} mK" for name, values in truth.items())
    return [f"  truth: {words}"]


def _residuals(rows: Sequence[Judged], chosen: int | None) -> list[str]:
    lines = [
        "                         whitened residuals       conditioning      signal  the other turning points",
        "  foreground              runs   lag 1, error    number    range     left  B, MHz        B, mK          D, MHz"
        "        D, mK",
    ]
    for number, row in enumerate(rows):
        if row.white is None:
            continue
        off = f"{row.white.runs.deviation:+.1f}σ"
        lag = f"{row.white.lag_one.value - row.white.lag_one.expected:+.3f} ±{row.white.lag_one.error:.3f}"
        lines.append(
            f"{_mark(number, chosen)}{label(row):21}{off:>7}  {lag:>14}{row.condition_number:10.3g}"
            f"{row.dynamic_range:9.1e}{row.surviving:9.2%}  {_point(row, 'B')}  {_point(row, 'D')}"
        )
    return lines


def _mark(number: int, chosen: int | None) -> str:
    return "> " if number == chosen else "  "


def _failures(rows: Sequence[Judged]) -> list[str]:
    return [line for row in rows if row.problem for line in _wrapped([f"not fitted: {label(row)}: {row.problem}"])]


def _columns() -> list[str]:
    return [
        "chi-squared over freedom: over its degrees of freedom, and the chance that noise gives more: with any signal "
        "at all, with the best trough of the prior (six numbers), and without a signal.",
        "AIC, BIC: over the lowest; they count free terms and the trough's six numbers, and not what has a prior, so "
        "they rank members of one family, not families with a prior against those without.",
        "evid.: ln of the evidence with a trough, integrated over its prior, under the best. A foreground that is free "
        "has none; here its coefficient k (from 0) is normal about a power law of the bin's level with sd "
        f"{DECAY:g}^-k in ln T (linear families: {DECAY:g}^-k of the level, K). Ten times wider, and ln evidence falls "
        "by 2.3 for each free coefficient of each bin; families that are not linear are taken at the fit's tangent.",
        f"channels, bins: ln density with which all other data predict what is left out, under the best: {BLOCKS} "
        "blocks of neighbouring channels in turn, all bins of them; and each bin in turn. Same priors.",
        "runs, lag 1: number of runs of one sign, and autocorrelation of neighbouring channels, of the residuals of "
        "the best trough, whitened by the full covariance; both less their mean over "
        f"{NOISE_DRAWS} draws of noise through the same projector, in units of, or beside, their spread there. "
        "Negative runs, positive lag: some foreground is left.",
        "conditioning: condition number of the scaled, whitened free terms; largest foreground over its noise.",
        "signal left: share of the trough's signal-to-noise ratio that the fit leaves.",
        "turning points: posterior mean and standard deviation; a ? where fewer than "
        f"{ENOUGH_DRAWS:g} effective draws carry it.",
    ]


def _rule(rows: Sequence[Judged], chosen: int | None) -> list[str]:
    rule = (
        f"In each family the fewest terms whose best trough leaves a chi-squared of more than {SMALLEST_CHANCE:.0%} "
        f"chance, and from which the next larger number moves C by less than {STILL:g} of its error, or less than "
        f"{SCATTER:g} times the scatter that the larger error allows; a family tried with one number of terms need "
        "only pass the first. Of these the one of the largest evidence."
    )
    if chosen is None:
        verdict = "No foreground of this table passes: none is marked, and no turning point here should be believed."
    else:
        verdict = f"Marked (>): {label(rows[chosen])}. The choice is yours; look at what the others make of C."
    return [rule, verdict]


def _wrapped(entries: Sequence[str]) -> list[str]:
    return [
        line
        for entry in entries
        for line in textwrap.wrap(entry, COLUMNS, initial_indent="  ", subsequent_indent="    ")
    ]
