"""What ``quietlimb trust`` does: mocks of many worlds, reduced, and the page, numbers and plots made of them."""

from __future__ import annotations

import json
import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from threadpoolctl import threadpool_limits

from reduce.quick_posterior import ENOUGH
from reduce.report.files import claim, write_all
from reduce.report.style import look, png
from reduce.report.trust_plot import trust_figure
from reduce.runner import Progress
from reduce.trust import packed_trust, trust
from reduce.trust_facts import FALSE, FEWEST_MOCKS, TRUE, UNKNOWN, spoken, trust_facts
from sims.config import Config
from sims.config_load import load_config
from sims.errors import InputError, raise_if_any
from sims.products import write_product

NUMBERS, PAGE, PICTURE, RECORD = "trust.json", "trust.txt", "trust.png", "trust.nc"
COLUMNS = 100
INDENT = "  "
HEAD = f"{'':22}{'stated error':>15}{'mean pull':>15}{'pull width':>15}{'68 %':>9}{'95 %':>9}{'p(ranks)':>11}"
MARKS = {TRUE: "=", FALSE: "!", UNKNOWN: "?"}
ALARMS = {"statistic": "depth of C over its error", "log_bayes_factor": "ln Bayes factor"}


def report_trust(
    config_path: Path,
    out: Path,
    *,
    mocks: int,
    outside: Sequence[Path],
    processes: int,
    update: bool,
    progress: Progress,
) -> str:
    """Make mocks of many worlds, reduce them, and write what they say of the stated errors.

    Parameters
    ----------
    config_path : Path
        TOML configuration.
    out : Path
        Folder; made if it is not there. What else it holds is left alone.
    mocks : int
        With a signal, and as many without.
    outside : sequence of Path
        Configurations of further worlds, each named by its file.
    processes : int
    update : bool
        Allow files of these names to be replaced.
    progress : Progress
        Makes progress bars.

    Returns
    -------
    str
        The page for the terminal.

    Raises
    ------
    InputError
        With every problem of the configurations and options, or if files are in the way.
    """
    names = (NUMBERS, PAGE, PICTURE, RECORD)
    config, worlds = _input(config_path, out, names, mocks, outside, processes, update=update)
    with threadpool_limits(1, user_api="blas"):
        found = trust(config, mocks, progress, outside=worlds, processes=processes)
    facts = trust_facts(found)
    page = trust_page(facts, config)
    with look():
        picture = png(trust_figure(found, facts))
    numbers = json.dumps(facts, indent=2, allow_nan=False) + "\n"
    write_all(out, {NUMBERS: numbers, PAGE: page + "\n", PICTURE: picture})
    write_product(packed_trust(found), out / RECORD)
    return f"{page}\n\nwrote {', '.join(names)} to {out}"


def _input(
    config_path: Path,
    out: Path,
    names: Sequence[str],
    mocks: int,
    outside: Sequence[Path],
    processes: int,
    *,
    update: bool,
) -> tuple[Config, list[tuple[str, Config]]]:
    """Configurations of the reduction and of the worlds from outside; every problem at once."""
    problems: list[str] = []
    loaded: list[Config] = []
    for path in (config_path, *outside):
        try:
            loaded.append(load_config(path))
        except InputError as error:
            problems += error.problems
    if mocks < FEWEST_MOCKS:
        problems.append(f"--mocks: got {mocks}; allowed are at least {FEWEST_MOCKS}")
    if processes < 1:
        problems.append(f"--processes: got {processes}; allowed are at least 1")
    stems = [path.stem for path in outside]
    problems += [
        f"--outside: two worlds would be named {stem}; name their files differently"
        for stem in sorted({stem for stem in stems if stems.count(stem) > 1})
    ]
    try:
        claim(out, names, update=update)
    except InputError as error:
        problems += error.problems
    raise_if_any(problems)
    return loaded[0], list(zip(stems, loaded[1:], strict=True))


def trust_page(facts: dict[str, Any], config: Config) -> str:
    """The page, at most `COLUMNS` columns.

    Parameters
    ----------
    facts : dict
        `reduce.trust_facts.trust_facts`.
    config : Config
        Of the reduction.

    Returns
    -------
    str
    """
    lines = _wrapped(f"{config.run.name}: can the stated errors be trusted?", "")
    if config.sky.kind == "invented":
        lines += _wrapped("INVENTED: the sky and the campaign are made up. What stands here is true of no sky.", "")
    for title, body in (
        ("Where the stated errors stop being true", _verdicts(facts)),
        ("What was done", _done(facts, config)),
        (f"As believed: {facts['believed']['about']}", _world(facts["believed"])),
        ("Without a signal", _alarms(facts)),
        *((f"From outside, {world['name']}: {world['about']}", _world(world)) for world in facts["outside"]),
        ("How to read this", _rules(facts)),
        ("Left out", _left_out(facts, config)),
    ):
        lines += ["", *_wrapped(title, "")]
        for entry in body:
            lines += _wrapped(entry, INDENT)
    return "\n".join(lines)


def _wrapped(text: str, indent: str) -> list[str]:
    """Lines of at most `COLUMNS`; a line that fits is left as it is, with its columns."""
    if len(indent + text) <= COLUMNS:
        return [(indent + text).rstrip()]
    return textwrap.wrap(
        text, COLUMNS, initial_indent=indent, subsequent_indent=indent + INDENT, break_on_hyphens=False
    )


def _verdicts(facts: dict[str, Any]) -> list[str]:
    judged = [(world["name"], world["verdict"]) for world in (facts["believed"], *facts["outside"])]
    judged += [(f"false alarms, {title}", facts["alarms"][name]["verdict"]) for name, title in ALARMS.items()]
    return [f"{MARKS[verdict['errors']]} {name}: {'; '.join(verdict['text'])}" for name, verdict in judged]


def _done(facts: dict[str, Any], config: Config) -> list[str]:
    believed, silent = facts["believed"], facts["silent"]
    family = ", ".join(f"{name} {value}" for name, value in facts["foreground"].items())
    outside = ", ".join(f"{world['mocks']} of {world['name']!r}" for world in facts["outside"]) or "none"
    return [
        f"{believed['mocks']} mocks as believed, {silent['mocks']} without a signal; from outside: {outside}; "
        f"seed {facts['seed']}",
        "each has a sky, antenna and receiver of its own, a trough from the prior (or none) and noise of "
        f"{config.observation.integration_hours:.5g} h, and is reduced as the campaign is: with the response, "
        "the covariance and the foreground that its team believes in",
        f"foreground: {family}",
    ]


def _world(world: dict[str, Any]) -> list[str]:
    """Table of the parameters, and how the fits went."""
    parameters = world["parameters"]
    lines = [f"{world['mocks']} mocks", HEAD]
    for name, own in parameters.items():
        unit = "MHz" if name.endswith("_mhz") else "mK"
        covered = "".join(
            f"{row['found']:8.3f}{' ' if row['inside'] else '!'}" for row in (own["coverage"][k] for k in ("68", "95"))
        )
        lines.append(
            f"{spoken(name):22}{own['mean_sd']:11.3g} {unit:3}{_with_error(own, 'mean_pull', '+.2f')}"
            f"{_with_error(own, 'pull_width', '.2f')}{covered}{_probability(own['uniformity_p']):>11}"
        )
    first = next(iter(parameters.values()))["coverage"]
    bands = " and ".join(f"{first[k]['low']:.3f} to {first[k]['high']:.3f}" for k in ("68", "95"))
    return [
        *lines,
        f"coverage may lie in {bands}, all {2 * len(parameters)} numbers together in 99 % of such tables",
        f"family-wise p of the coverage: {_probability(world['family_wise_p'])}",
        *_fits(world),
    ]


def _with_error(own: dict[str, Any], name: str, form: str) -> str:
    return f"{format(own[name], form) + ' ± ' + format(own[f'{name}_error'], '.2f'):>15}"


def _probability(p: float) -> str:
    return "< 0.001" if p < 0.001 else f"{p:.3f}"


def _fits(world: dict[str, Any]) -> list[str]:
    chi = world["chi_squared"]
    lines = [
        f"chi-squared {chi['mean']:.1f} ± {chi['mean_error']:.1f} of {chi['degrees_of_freedom']:.0f}; "
        f"{chi['share_improbable']:.1%} of the fits are less probable than 1 %",
        f"fewest effective draws {world['fewest_effective_draws']:.0f}; fewer than {ENOUGH:g} in "
        f"{world['share_short_of_draws']:.1%} of the fits",
    ]
    if world["share_not_at_rest"] > 0.0:
        lines.append(f"fiducial signal not at rest in {world['share_not_at_rest']:.1%} of the fits")
    return lines


def _alarms(facts: dict[str, Any]) -> list[str]:
    lines = [
        f"{facts['silent']['mocks']} mocks: half of them set a threshold for 1 % false alarms, the other half try it",
        f"{'':26}{'threshold':>11}{'alarms':>14}   allowed",
    ]
    for name, title in ALARMS.items():
        own = facts["alarms"][name]
        alarms = f"{own['alarms']} of {own['fresh']}{' ' if own['inside'] else '!'}"
        lines.append(f"{title:26}{own['threshold']:11.2f}{alarms:>14}   {own['low']:.0f} to {own['high']:.0f}")
    lines.append(f"{'mocks with a signal above it':36}{'depth':>10}{'Bayes':>10}")
    detected = [facts["alarms"][name]["detected"] for name in ALARMS]
    lines += [
        f"  {textwrap.shorten(world, 32, placeholder=' ...'):34}"
        + "".join(f"{shares[world]:10.1%}" for shares in detected)
        for world in detected[0]
    ]
    return [*lines, *_fits(facts["silent"])]


def _rules(facts: dict[str, Any]) -> list[str]:
    rules = facts["rules"]
    return [
        "pull: (posterior mean − truth) / stated error, of mean 0 and width 1 where stated errors are true and troughs "
        "come from the prior; ± is one standard error",
        f"a departure is told where chance does not explain it (the {rules['numbers']} numbers of all worlds stay in "
        f"their bands together in {rules['all_together']:.0%} of such studies) and it is more than "
        f"{rules['bias_told']:g} of the stated error or a factor {rules['factor_told']:g}",
        f"stated errors hold where none is told and a bias of {rules['bias_matters']:g} or a factor "
        f"{rules['factor_matters']:g} would lie outside of the bands; where it would not, so many mocks cannot tell",
        f"false alarms are as meant where the 99 % band holds them and {rules['alarms_matter']:.0%} would lie outside",
        f"chi-squared is as it should be where it flags {rules['improbable']:.0%} of the fits, and "
        f"{rules['improbable_matters']:.0%} would lie outside of the band",
        f"chi-squared tells of a world where it flags more than {rules['chi_squared_tells']:.0%} of its fits: those "
        f"less probable than {rules['improbable']:.0%}",
        "= holds, ! does not hold, ? cannot tell; ! in a table: outside of its band",
        "p(ranks): probability of ranks as uneven as these if posteriors are true (Kolmogorov and Smirnov)",
    ]


def _left_out(facts: dict[str, Any], config: Config) -> list[str]:
    outside = [world["name"] for world in facts["outside"]]
    lines = ["worlds that nobody thought of: what is tried from outside is not all that can go wrong"]
    if not outside:
        lines.append("any world from outside: give one with --outside")
    lines += [
        "mocks without a signal in the worlds from outside: false alarms are known as believed only",
        "the sampler of record: mocks are reduced by the fast posterior that stands beside it",
    ]
    return lines
