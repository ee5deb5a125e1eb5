"""The flow has one direction: `reduce` imports `sims`, and a file only what stands above it in the list here."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]

ORDER = (
    "sims.errors",
    "sims.constants",
    "sims.schema",
    "sims.products",
    "sims.quantities",
    "sims.knowledge",
    "sims.config_types",
    "sims.config_sky",
    "sims.config_beam",
    "sims.config_vantage",
    "sims.config_forward",
    "sims.config_reduction",
    "sims.config_idle",
    "sims.config",
    "sims.config_paths",
    "sims.config_load",
    "sims.streams",
    "sims.draws",
    "sims.profile",
    "sims.frequency",
    "sims.data",
    "sims.cosmology",
    "sims.radio_background",
    "sims.hydrogen",
    "sims.spin_temperature",
    "sims.collisions",
    "sims.lyman_alpha",
    "sims.sky_map_checks",
    "sims.sky_healpix",
    "sims.sky_images",
    "sims.sky_maps",
    "sims.sky_grid",
    "sims.sky_survey",
    "sims.sky_cube",
    "sims.sky_layers",
    "sims.sky_join",
    "sims.sky_invented",
    "sims.sky_power_law",
    "sims.sky_joined",
    "sims.sky",
    "sims.beam",
    "sims.beam_spline",
    "sims.beam_error",
    "sims.beam_smooth",
    "sims.far_field",
    "sims.nec_printout",
    "sims.beam_nec",
    "sims.beam_table_file",
    "sims.beam_healpix",
    "sims.beam_netcdf",
    "sims.beam_grid",
    "sims.beam_files",
    "sims.ephemeris",
    "sims.moon_frame",
    "sims.orbit",
    "sims.csv_table",
    "sims.orbit_lines",
    "sims.orbit_sequence",
    "sims.orbit_message",
    "sims.orbit_states",
    "sims.horizon",
    "sims.attitude_table",
    "sims.lander",
    "sims.site",
    "sims.visibility",
    "sims.windows",
    "sims.diffraction",
    "sims.sources",
    "sims.attitude",
    "sims.view",
    "sims.vantage",
    "sims.pixels",
    "sims.limb",
    "sims.mirror",
    "sims.moon",
    "sims.pixel_kernel",
    "sims.pixel_sum",
    "sims.sky_average",
    "sims.mean_beam",
    "sims.receiver",
    "sims.trough",
    "sims.trough_table",
    "sims.campaign",
    "reduce.covariance",
    "reduce.binning",
    "reduce.spectra",
    "reduce.foreground",
    "reduce.foreground.protocol",
    "reduce.foreground.known",
    "reduce.foreground.log_polynomial",
    "reduce.foreground.power_series",
    "reduce.foreground.galaxy_ionosphere",
    "reduce.foreground.gaussian_process",
    "reduce.foreground.convex",
    "reduce.foreground.maximally_smooth",
    "reduce.foreground.smooth_fit",
    "reduce.foreground.smooth_signs",
    "reduce.subtract",
    "reduce.removed",
    "reduce.combine",
    "reduce.signal_shape",
    "reduce.extrema",
    "reduce.trough_model",
    "reduce.shapes",
    "reduce.free_form",
    "reduce.fast_posterior",
    "reduce.local_maxima",
    "reduce.mixture",
    "reduce.quick_posterior",
    "reduce.modes",
    "reduce.forecast",
    "reduce.posterior_file",
    "reduce.posterior_flags",
    "reduce.turning_points",
    "reduce.limits",
    "reduce.limits_text",
    "reduce.joint_fit",
    "reduce.evidence",
    "reduce.whiteness",
    "reduce.judge",
    "reduce.compare",
    "reduce.handoff",
    "reduce.transfer",
    "reduce.knowledge_modes",
    "reduce.chromaticity",
    "reduce.redraw",
    "reduce.ensemble",
    "reduce.calibration",
    "reduce.mocks",
    "reduce.trust",
    "reduce.trust_facts",
    "reduce.timeline",
    "reduce.sky_card",
    "reduce.beam_card",
    "reduce.runner",
    "reduce.report",
    "reduce.report.facts",
    "reduce.report.style",
    "reduce.report.files",
    "reduce.report.spectra_plot",
    "reduce.report.residuals_plot",
    "reduce.report.trough_plot",
    "reduce.report.turning_points_plot",
    "reduce.report.transfer_plot",
    "reduce.report.shapes_plot",
    "reduce.report.compare_plot",
    "reduce.report.compare_text",
    "reduce.report.trust_plot",
    "reduce.report.sky_plot",
    "reduce.report.beam_plot",
    "reduce.report.sky_page",
    "reduce.report.beam_page",
    "reduce.report.timeline_plot",
    "reduce.report.timeline_page",
    "reduce.report.trust_page",
    "reduce.report.plots",
    "reduce.report.summary",
    "reduce.pipeline",
    "reduce.report.compare_page",
    "reduce.starter",
    "reduce.preview",
    "reduce.cli",
)
# The command answers --help and refuses slips without waiting for the libraries of a fit.
MAY_IMPORT_LATE = {"reduce.cli"}


def module_name(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


def files() -> dict[str, Path]:
    """Every file of both packages by its module's name, but the two empty heads."""
    found = {module_name(path): path for package in ("sims", "reduce") for path in (ROOT / package).rglob("*.py")}
    return {name: path for name, path in found.items() if name not in ("sims", "reduce")}


def imported(tree: ast.AST, known: set[str]) -> Iterator[tuple[int, str]]:
    """Line and name of each import of a module of ours, wherever it stands in the file."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            module = "." * node.level + (node.module or "")
            below = [f"{module}.{alias.name}" for alias in node.names]
            # `from sims import config` names a module, `from sims.config import Sky` something inside of one.
            names = [name if name in known else module for name in below]
        else:
            continue
        yield from ((node.lineno, name) for name in names if name.split(".")[0] in ("sims", "reduce", ""))


def late_imports(tree: ast.AST) -> list[int]:
    """Lines of imports inside functions."""
    functions = [
        node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
    ]
    return sorted({
        node.lineno for function in functions for node in ast.walk(function)
        if isinstance(node, ast.Import | ast.ImportFrom)
    })  # fmt: skip


def against_the_flow(name: str, source: str) -> list[str]:
    """What a file of this name imports that does not stand above it."""
    above = ORDER[: ORDER.index(name)]
    problems = []
    for line, other in imported(ast.parse(source), set(ORDER)):
        if other not in above:
            problems.append(f"{name}, line {line}: imports {other}, which does not stand above it")
        elif name.startswith("sims.") and not other.startswith("sims."):
            problems.append(f"{name}, line {line}: sims must not import {other}")
    return problems


def test_the_list_names_every_file_and_no_other() -> None:
    assert len(set(ORDER)) == len(ORDER)
    assert set(files()) == set(ORDER)


def test_sims_stands_whole_above_reduce() -> None:
    packages = [name.split(".")[0] for name in ORDER]
    assert packages == sorted(packages, reverse=True)


@pytest.mark.parametrize("name", ORDER)
def test_a_file_imports_only_what_stands_above_it(name: str) -> None:
    assert against_the_flow(name, files()[name].read_text(encoding="utf-8")) == []


@pytest.mark.parametrize("name", sorted(set(ORDER) - MAY_IMPORT_LATE))
def test_imports_stand_at_the_top(name: str) -> None:
    assert late_imports(ast.parse(files()[name].read_text(encoding="utf-8"))) == []


def test_the_empty_heads_import_nothing() -> None:
    for package in ("sims", "reduce"):
        tree = ast.parse((ROOT / package / "__init__.py").read_text(encoding="utf-8"))
        assert not any(isinstance(node, ast.Import | ast.ImportFrom) for node in ast.walk(tree))


@pytest.mark.parametrize(
    ("name", "source"),
    [
        ("sims.campaign", "from reduce.binning import bin_recording"),
        ("sims.campaign", "import reduce.cli"),
        ("sims.config", "from sims.config_load import load_config"),
        ("sims.config", "from sims import config_load"),
        ("sims.config", "def f():\n    from sims.campaign import observe"),
        ("sims.config", "from .campaign import observe"),
        ("reduce.binning", "from reduce.pipeline import run"),
        ("reduce.binning", "if True:\n    import reduce.pipeline"),
        ("sims.config", "import sims.config"),
    ],
)
def test_an_import_against_the_flow_would_be_seen(name: str, source: str) -> None:
    assert len(against_the_flow(name, source)) == 1


def test_an_import_inside_a_function_would_be_seen() -> None:
    source = "import json\n\nclass A:\n    def f(self):\n        import os\n        return os\n"
    assert late_imports(ast.parse(source)) == [5]
