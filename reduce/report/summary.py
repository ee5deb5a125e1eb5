"""summary.txt: one page of a laboratory notebook: what was observed, fitted and found, and its limits."""

from __future__ import annotations

import json
import textwrap
from typing import Any

import numpy as np

from reduce.report.facts import attribute_list, bins_with_data, invented, true_points, true_signal_k
from reduce.runner import Products
from reduce.trough_model import NAMES, POINTS
from sims.config import Config, FitConfig, NoSignal

COLUMNS = 100
INDENT = "  "


def summary(products: Products, config: FitConfig) -> str:
    """The page.

    Parameters
    ----------
    products : Products
        With spectra.nc, bundle.nc and turning_points.json; truth.nc for a mock.
    config : FitConfig
        Of the run; a whole `Config` for a mock.

    Returns
    -------
    str
        Plain text of at most `COLUMNS` columns, ending in a line break.
    """
    lines = _wrapped(f"{config.run.name}: from spectra to turning points", "")
    if invented(products, config):
        lines += _wrapped("INVENTED: the sky and the campaign are made up. What stands here is true of no sky.", "")
    if isinstance(config, Config):
        truth = "one draw from [knowledge]" if config.run.truth == "drawn" else "as the configuration has it"
        lines += _wrapped(f"A mock: its true sky and instrument are {truth}.", "")
    for title, body in (
        ("Observed", _observed(products, config)),
        ("Foreground and fit", _fit(products, config)),
        ("Turning points: median and 68 % interval", _points(products, config)),
        ("What C says of the gas, without a model of its sources (gas.txt says more)", _gas(products)),
        ("Is it there, and is it sampled well", _trust(products)),
        ("Flags", _flags(products)),
        ("Left out", _left_out(products, config)),
    ):
        lines += ["", title]
        for entry in body:
            lines += _wrapped(entry, INDENT)
    return "\n".join(lines) + "\n"


def _wrapped(text: str, indent: str) -> list[str]:
    """Lines of at most `COLUMNS`; a line that fits is left as it is, with its columns."""
    if len(indent + text) <= COLUMNS:
        return [indent + text]
    return textwrap.wrap(text, COLUMNS, initial_indent=indent, subsequent_indent=indent + INDENT)


def _observed(products: Products, config: FitConfig) -> list[str]:
    spectra = products.dataset("spectra.nc")
    frequency, width = spectra["frequency_mhz"].values, spectra["width_mhz"].values
    flag = spectra["flag"].values
    bins = bins_with_data(products)
    unused = int((flag[bins] != 0).all(axis=0).sum())
    by = f" by {config.bins.by}" if isinstance(config, Config) and config.bins.by != "all" else ""
    empty = spectra.sizes["bin"] - len(bins)
    counted = f"{len(bins)} bin{'s' if len(bins) > 1 else ''}"
    more = f" ({empty} more without data)" if empty else ""
    low, high = frequency[0] - width[0] / 2.0, frequency[-1] + width[-1] / 2.0
    lines = [f"{counted}{by}{more}, {len(frequency)} channels from {low:.6g} to {high:.6g} MHz, {unused} never used"]
    if isinstance(config, Config):
        lines.append(
            f"from {config.vantage.kind.replace('-', ' ')}, beginning {config.observation.start:%Y-%m-%d %H:%M} UTC; "
            f"{config.observation.duty_cycle:.0%} of the time on the antenna"
        )
    if "weight_s" in spectra:
        hours = spectra["weight_s"].values[bins] / 3600.0
        lines.append(f"integration {hours.sum():.5g} h in all, {_span(hours, '.4g')} h a bin")
    lines.append(f"noise a channel, median bin: {_noise(products)}")
    response = spectra["signal_response"].values[flag == 0]
    lines.append(f"signal response w: {_span(response, '.4f')}")
    if "engine" in spectra.attrs:
        lines.append(_engine(json.loads(spectra.attrs["engine"])))
    return lines


def _span(values: np.ndarray, form: str) -> str:
    low, high = format(float(values.min()), form), format(float(values.max()), form)
    return low if low == high else f"{low} to {high}"


def _noise(products: Products) -> str:
    """Noise at the lowest, middle and highest channel in use."""
    spectra = products.dataset("spectra.nc").isel(bin=bins_with_data(products))
    good = spectra["flag"].values == 0
    used = np.flatnonzero(good.any(axis=0))
    parts = []
    for channel in used[[0, len(used) // 2, -1]]:
        variance = spectra["noise_variance"].values[good[:, channel], channel]
        parts.append(
            f"{1e3 * np.median(np.sqrt(variance)):.3g} mK at {float(spectra['frequency_mhz'][channel]):.1f} MHz"
        )
    return ", ".join(parts)


def _engine(reached: dict[str, Any]) -> str:
    error = f"{1e6 * float(reached['error_k']):.2g} microkelvin"
    if reached["nodes"]:
        return f"sky average: {reached['nodes']} nodes in frequency, off between them by {error} at most where checked"
    return (
        f"sky average: not smooth in frequency, {reached['evaluations']} frequencies integrated; two quadratures "
        f"differ by at most {error}"
    )


def _fit(products: Products, config: FitConfig) -> list[str]:
    numbers = products.dataset("bundle.nc").attrs
    best = products["turning_points.json"]["best_trough"]
    sizes = products.dataset("bundle.nc").sizes
    modes, terms = sizes.get("mode", 0), sizes["term"]
    names = attribute_list(products.dataset("bundle.nc"), "mode_names")
    surviving = float(numbers["signal_surviving_fraction"])
    about = f" ({', '.join(str(name) for name in names)})" if names else ""
    corrected = []
    if "chromaticity_factor" in products.dataset("spectra.nc"):
        factor = products.dataset("spectra.nc")["chromaticity_factor"].values
        error = products.dataset("spectra.nc")["chromaticity_error"].values
        corrected = [
            f"chromaticity of the beam divided out first: factors {factor.min():.4f} to {factor.max():.4f}, known to "
            f"{error.max():.1e}"
        ]
    known = int(numbers.get("foreground_known_modes", 0))
    return [
        *corrected,
        *_model(products, config, terms, known, float(numbers["foreground_condition_number"])),
        f"covariance: noise and {modes - known} systematic modes{about}"
        if modes > known or not known
        else "covariance: noise and the modes of the foreground",
        _chi("foreground alone", numbers["foreground_chi_squared"], numbers["foreground_degrees_of_freedom"]),
        _chi("foreground, best trough", best["chi_squared"], best["degrees_of_freedom"]),
        _chi("foreground, any signal", numbers["chi_squared_min"], numbers["degrees_of_freedom"]),
        f"of the signal's signal-to-noise ratio {surviving:.2%} survives the subtraction",
    ]


def _model(products: Products, config: FitConfig, terms: int, known: int, condition: float) -> list[str]:
    """What the foreground is modelled by."""
    settings = config.foreground
    if settings.family == "ensemble":
        packed = products.dataset("ensemble.nc")
        size = packed["size_of_noise"].values
        safety = ""
        if settings.safety_terms is not None:
            safety = f"; beside it {settings.safety_terms} terms a bin of {settings.safety_sd:g} of the foreground each"
        return [
            f"ensemble of {packed.attrs['draws']} simulated campaigns, all bins jointly: {len(size)} modes, the "
            f"largest {size[0]:.2g} times the noise, {int((size > 1.0).sum())} above it; variance times "
            f"{float(packed.attrs['inflation']):.3f} for the finite number of draws{safety}",
            f"drawn anew in each: {', '.join(str(path) for path in attribute_list(packed, 'drawn_paths'))}",
        ]
    free = f"{settings.family}, {terms} terms a bin without priors; condition number {condition:.3g}"
    if settings.family != "gaussian-process":
        return [free]
    return [
        free,
        f"it may err by {settings.amplitude:g} of itself, correlated over {settings.length:g} in ln f: {known} modes",
    ]


def _chi(name: str, chi_squared: Any, degrees: Any) -> str:
    chi, dof = float(chi_squared), int(degrees)
    if dof <= 0:
        return f"chi-squared, {name:26s}{chi:9.1f} with no degree of freedom left"
    scatter = np.sqrt(2.0 / dof)
    return f"chi-squared, {name:26s}{chi:9.1f} /{dof:6d} = {chi / dof:.3f}; 1 ± {scatter:.3f} if nothing is missing"


def _points(products: Products, config: FitConfig) -> list[str]:
    found, truth = products["turning_points.json"], true_points(products, config)
    lines = [f"   {'posterior':>34s}   {'prior':>15s}" + (f"   {'truth':>8s}" if truth is not None else "")]
    for number, point in enumerate(POINTS):
        for at, (name, unit) in enumerate((("frequency_mhz", "MHz"), ("temperature_mk", "mK"))):
            marginal = found["points"][point][name]
            low, high = marginal["interval_68"]
            bounds = found["prior"][NAMES[number + 3 * at]]
            value = f"{marginal['median']:8.2f}  ({low:8.2f} to {high:8.2f}) {unit:3s}"
            prior = f"{bounds[0]:g} to {bounds[1]:g}"
            line = f"{point if at == 0 else ' '}  {value:>34s}   {prior:>15s}"
            lines.append(line + (f"   {truth[point][at]:8.2f}" if truth is not None else ""))
    put_in = true_signal_k(products)
    if put_in is not None and truth is None:
        lines.append(_other_truth(products, config, put_in))
    return lines


def _other_truth(products: Products, config: FitConfig, signal_k: np.ndarray) -> str:
    if isinstance(config, Config) and isinstance(config.signal, NoSignal):
        return "truth: no signal was put in; whatever stands above was invented by noise, foreground and prior"
    deepest = int(np.argmin(signal_k))
    frequency = float(products.dataset("truth.nc")["frequency_mhz"][deepest])
    return f"truth: another shape, deepest {1e3 * signal_k[deepest]:.1f} mK at {frequency:.2f} MHz"


def _gas(products: Products) -> list[str]:
    """The headlines of gas.txt."""
    gas = products["turning_points.json"]["gas"]
    at_c = gas["points"]["C"]
    lines = [
        f"redshift {_marginal(at_c['redshift'], '.2f')}, spin temperature {_marginal(at_c['spin_temperature_k'])} K",
        f"gas no hotter than {_bound(at_c['kinetic_temperature_max_k'], 'upper_95')} K (95 %), heat left below "
        f"{_bound(at_c['heat_max_ev_per_baryon'], 'upper_95')} eV a baryon",
        "coupling saturated, heat cancels at least "
        f"{_bound(at_c['heating_share_of_adiabatic'], 'lower_95')} of the adiabatic cooling (95 %)",
    ]
    return lines if gas["background"]["excess_k"] == 0.0 else [gas["background"]["text"], *lines]


def _marginal(spread: dict[str, Any], form: str = ".3g") -> str:
    if not spread["defined"]:
        return "undefined"
    low, high = ("without bound" if end is None else format(end, form) for end in spread["interval_68"])
    middle = "without bound" if spread["median"] is None else format(spread["median"], form)
    return f"{middle} ({low} to {high})"


def _bound(spread: dict[str, Any], side: str) -> str:
    value = spread.get(side) if spread["defined"] else None
    return "anything" if value is None else f"{value:.3g}"


def _trust(products: Products) -> list[str]:
    found = products["turning_points.json"]
    how = found["convergence"]
    cold = ", ".join(f"{point} {found['points'][point]['share_colder_than_gas']:.1%}" for point in POINTS)
    return [
        f"depth of C below B and D over its error: {found['detection_statistic']:.2f}. What counts as a detection is "
        "read off mocks without a signal, not off a normal law: the prior alone gives a positive number.",
        f"ln of the Bayes factor against no signal: {found['log_bayes_factor']['value']:.1f} ± "
        f"{found['log_bayes_factor']['standard_error']:.1f}, for this shape and prior",
        _maxima(found),
        _forecast(found),
        f"colder than unheated gas can be, share of draws: {cold}",
        f"split R-hat up to {max(how['split_r_hat'].values()):.4f}, effective draws from "
        f"{min(how['effective_size'].values()):.0f}, acceptance {how['acceptance']:.2f}: "
        + ("converged" if how["converged"] else "NOT CONVERGED"),
    ]


def _maxima(found: dict[str, Any]) -> str:
    shares = [mode["share_of_draws"] for mode in found["modes"]]
    told = ", ".join(f"{share:.0%}" for share in shares)
    return f"maxima of the posterior: {len(shares)}, with {told} of the draws" if shares else "maxima: none found"


def _forecast(found: dict[str, Any]) -> str:
    sd = found["forecast"]["with_prior_sd"]
    return (
        f"errors forecast from the slope and the prior's width: C {sd['frequency_c_mhz']:.2f} MHz, "
        f"{sd['temperature_c_mk']:.1f} mK"
    )


def _flags(products: Products) -> list[str]:
    flags = list(products["turning_points.json"]["flags"])
    numbers = products.dataset("bundle.nc").attrs
    if not numbers.get("fiducial_at_rest", 1):
        flags.append(
            f"the signal at which the response's error is taken did not come to rest in {numbers['fiducial_rounds']} "
            "rounds: the response is known too badly for a covariance that does not depend on the signal"
        )
    return [f"! {flag}" for flag in flags] or ["none"]


def _left_out(products: Products, config: FitConfig) -> list[str]:
    lines = []
    if products.dataset("spectra.nc").attrs.get("signal_response_given") == 0:
        lines.append(
            "the signal response: no w came with the data and it was taken as 1; where part of the beam is not sky, "
            "the trough comes out too shallow by that part"
        )
    if not isinstance(config, Config):
        lines.append("any model of sky, beam and receiver: the foreground is the smooth family alone, errors as given")
        return lines
    if not config.surface.reflection:
        lines.append("the sky mirrored by the surface (surface.reflection is off)")
    fields = [name for name in ("index_field", "map_noise") if getattr(config.knowledge, name) is not None]
    if fields and config.foreground.family != "ensemble":
        lines.append(f"from the covariance, though a drawn truth has it: knowledge.{', knowledge.'.join(fields)}")
    roughness = "roughness of the surface" if config.surface.layer else "roughness and layers of the surface"
    lines.append(
        "ionosphere; Sun and Earth as sources in the beam; temperature drifts of the instrument; interference; "
        f"{roughness}; any error of the receiver but scale, offset and one ripple"
    )
    return lines
