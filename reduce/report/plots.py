"""All figures of a run, as bytes by file name; the table of contents of the report's pictures.

Each figure is a file of its own beside this one. Without a truth (measured spectra), nothing
of a truth is drawn.
"""

from __future__ import annotations

from reduce.report.residuals_plot import residuals_figure
from reduce.report.shapes_plot import shapes_figure
from reduce.report.spectra_plot import spectra_figure
from reduce.report.style import look, png
from reduce.report.transfer_plot import transfer_figure
from reduce.report.trough_plot import trough_figure
from reduce.report.turning_points_plot import turning_points_figure
from reduce.runner import Products
from reduce.trough_model import TroughModel
from sims.config import FitConfig


def plots(products: Products, config: FitConfig, model: TroughModel) -> dict[str, bytes]:
    """Draw everything.

    Parameters
    ----------
    products : Products
        With spectra.nc, bundle.nc, transfer.nc, posterior.nc and turning_points.json; truth.nc is drawn
        where it is there.
    config : FitConfig
        Of the run; a whole `Config` for a mock.
    model : TroughModel
        Of the posterior, on the channels of the bundle.

    Returns
    -------
    dict of str to bytes
        PNG by file name; the same products give the same bytes.
    """
    with look():
        return {
            "spectra.png": png(spectra_figure(products, config)),
            "residuals.png": png(residuals_figure(products, config)),
            "trough.png": png(trough_figure(products, config, model)),
            "turning_points.png": png(turning_points_figure(products, config, model)),
            "transfer.png": png(transfer_figure(products, config, model)),
            "shapes.png": png(shapes_figure(products, config)),
        }
