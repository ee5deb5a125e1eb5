"""What ``quietlimb compare`` does: how much foreground is enough, as a page, a table and a plot.

It takes a run's folder as it stands, or observes the mock of a configuration first. After `reduce.pipeline`, whose
stages it borrows for that.
"""

from __future__ import annotations

import json
import re
from collections.abc import Sequence
from pathlib import Path

import xarray as xr
from threadpoolctl import threadpool_limits

from reduce.compare import candidates, compare, marked
from reduce.ensemble import known_from, without_drawn
from reduce.pipeline import draw_ensemble, observe_campaign
from reduce.report.compare_plot import compare_figure
from reduce.report.compare_text import compare_csv, compare_page, label
from reduce.report.files import claim, write_all
from reduce.report.style import look, png
from reduce.runner import RECORD, Products, Progress, Tools
from reduce.trough_model import trough_model
from sims.config import FORWARD_SECTIONS, Config, FitConfig
from sims.config_load import load_config
from sims.errors import InputError
from sims.products import read_product
from sims.schema import BUNDLE, ENSEMBLE, SPECTRA, TRUTH, describe

PAGE, TABLE, PICTURE = "compare.txt", "compare.csv", "compare.png"


def report_compare(
    source: Path,
    out: Path | None,
    *,
    families: Sequence[str] | None,
    terms: Sequence[int] | None,
    update: bool,
    progress: Progress,
) -> str:
    """Compare foregrounds on one set of spectra; write page, table and plot where a folder is named.

    Parameters
    ----------
    source : Path
        A run's folder, or the TOML configuration of a mock campaign.
    out : Path or None
        Folder; made if it is not there. What else it holds is left alone.
    families, terms : sequence or None
        As in `reduce.compare.candidates`.
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
        If the source cannot be read, a family or number of terms is not allowed, or files are in the way.
    """
    names = (PAGE, TABLE, PICTURE)
    if out is not None:
        claim(out, names, update=update)
    if source.is_dir():
        config, products = read_run(source)
        tried = candidates(families, terms, config.foreground, ensemble="ensemble.nc" in products)
    else:
        config = load_config(source)
        tried = candidates(families, terms, config.foreground, ensemble=config.foreground.family == "ensemble")
        products = observed(config, progress, ensemble=any(each.family == "ensemble" for each in tried))
    spectra = products.dataset("spectra.nc")
    model = trough_model(config.turning_points, spectra["frequency_mhz"].values, spectra["width_mhz"].values)
    ensemble = None
    if "ensemble.nc" in products and isinstance(config, Config):
        ensemble = known_from(products.dataset("ensemble.nc")), without_drawn(spectra, config)
    with progress("comparing foregrounds", len(tried)) as advance, threadpool_limits(1, user_api="blas"):
        rows = compare(spectra, tried, model, config.run.seed, ensemble, advance)
    if not any(row.fitted for row in rows):
        raise InputError([f"{label(row)}: {row.problem}" for row in rows])
    page = compare_page(rows, products, config)
    if out is None:
        return page
    with look():
        picture = png(compare_figure(rows, marked(rows), products, config))
    write_all(out, {PAGE: page + "\n", TABLE: compare_csv(rows), PICTURE: picture})
    return f"{page}\n\nwrote {', '.join(names)} to {out}"


def read_run(folder: Path) -> tuple[FitConfig, Products]:
    """Configuration and spectra of a run's folder, with truth.nc and ensemble.nc where they are.

    Raises
    ------
    InputError
        If it is no folder of a run, or a file in it cannot be read.
    """
    record = folder / RECORD
    try:
        tree = json.loads(record.read_text(encoding="utf-8"))["configuration"]
        whole = any(name in tree for name in FORWARD_SECTIONS)
        model = Config if whole else FitConfig
        config = model.model_validate(tree)
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputError(
            f"{folder}: not the folder of a run ({RECORD}: {str(error).splitlines()[0]}); give one that "
            "`quietlimb run` or `quietlimb fit` made, or a configuration"
        ) from None
    if (folder / "spectra.nc").is_file():
        spectra = read_product(folder / "spectra.nc", SPECTRA)
    else:  # measured spectra stand in the bundle alone
        spectra = spectra_of(read_product(folder / "bundle.nc", BUNDLE), config)
    products = Products({"spectra.nc": spectra})
    for name, product in (("truth.nc", TRUTH), ("ensemble.nc", ENSEMBLE)):
        if (folder / name).is_file():
            products[name] = read_product(folder / name, product)
    return config, products


def observed(config: Config, progress: Progress, *, ensemble: bool) -> Products:
    """Spectra and truth of a mock campaign, and the ensemble where it is wanted."""
    tools, products = Tools(progress, lambda line: None), Products()
    products.update(observe_campaign(products, config, tools))
    if ensemble:
        products.update(draw_ensemble(products, config, tools))
    return products


def spectra_of(packed: xr.Dataset, config: FitConfig) -> xr.Dataset:
    """The spectra that a bundle was made of, those of its bins that have data.

    Raises
    ------
    InputError
        If their own modes are not all in the bundle: an ensemble had taken their place.
    """
    if config.foreground.family == "ensemble":
        raise InputError(
            "bundle.nc: an ensemble stands in place of what the spectra's own modes say; compare needs spectra.nc, or "
            "the folder of a fit with another family"
        )
    kept = packed[[name for name in SPECTRA if name in packed]]
    known = int(packed.attrs["foreground_known_modes"])
    if known:
        own = kept.sizes["mode"] - known
        kept = kept.isel(mode=slice(0, own)) if own else kept.drop_dims("mode")
    return describe(kept, SPECTRA)


def numbers_from(text: str) -> list[int]:
    """Numbers of terms from what a person wrote: `4-10`, `5,7`, `6`, or a mixture.

    Raises
    ------
    InputError
        If it is none of these.
    """
    found: list[int] = []
    for part in text.split(","):
        ends = part.strip().split("-")
        if not re.fullmatch(r"\d{1,2}(-\d{1,2})?", part.strip()) or int(ends[0]) > int(ends[-1]):
            raise InputError(f"--terms: got {text!r}; allowed are whole numbers as 4-10, 5,7 or 6")
        found += range(int(ends[0]), int(ends[-1]) + 1)
    return sorted(set(found))
