"""Imports point one way, from the leaves of DESIGN 4 to the command line."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parent.parent / "xcorr"

# A module imports only from what stands before it; a folder counts as one entry.
LAYERS = (
    *("errors", "units", "parallel", "provenance"),
    "kernels",
    "spectral",
    *("cube", "template", "results"),
    "io",
    *("lines", "atmosphere", "tellurics", "psf", "geometry", "starlight", "star", "noise", "search"),
    *("significance", "weights", "throughput", "exposure", "columns", "engine", "answer", "assemble"),
    *("vetting", "injection", "abundance", "simulate"),
    *("inspection", "report", "_config_errors", "config", "inputs", "pipeline", "cli"),
)
COMMAND_LINE = ("cli", "commands", "__main__")
SCIENCE = LAYERS[LAYERS.index("lines") : LAYERS.index("simulate") + 1]
# What a scene must not share with the search, or the efficiency target were true by construction.
SIMULATE_AVOIDS = (
    *(
        "starlight",
        "search",
        "psf",
        "tellurics",
        "star",
        "noise",
        "weights",
        "throughput",
        "exposure",
        "columns",
    ),
    *("engine", "spectral.lsf", "spectral.columns", "spectral.channels"),
)


def layer_of(module: str) -> str:
    """The entry of `LAYERS` for a dotted name below the package, e.g. "io" for "io.output"."""
    head = module.split(".")[0]
    return "cli" if head in COMMAND_LINE else head


def imported(source: str, module: str) -> list[str]:
    """Dotted names below the package that a module's source imports, also inside functions."""
    found = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found += [
                name.name.removeprefix("xcorr.") for name in node.names if name.name.startswith("xcorr.")
            ]
        elif isinstance(node, ast.ImportFrom) and node.level:
            parts = ["xcorr", *module.split(".")][: -node.level]
            found.append(".".join([*parts[1:], *([node.module] if node.module else [])]))
        elif isinstance(node, ast.ImportFrom) and node.module == "xcorr":
            found += [name.name for name in node.names if name.name != "__version__"]
        elif isinstance(node, ast.ImportFrom) and (node.module or "").startswith("xcorr."):
            below = node.module.removeprefix("xcorr.")
            found += [below, *(f"{below}.{name.name}" for name in node.names)]
    return found


def third_party(source: str) -> list[str]:
    """Full dotted names of all absolute imports."""
    found = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found += [name.name for name in node.names]
        elif isinstance(node, ast.ImportFrom) and not node.level:
            found += [f"{node.module}.{name.name}" for name in node.names]
    return found


def breaches(module: str, source: str) -> list[str]:
    """What is wrong with the imports of a module, in words."""
    if module == "__init__":
        return []  # the package root hands out names lazily and imports nothing
    own, wrong = layer_of(module), []
    for name in imported(source, module):
        other = layer_of(name)
        if other == own:
            continue
        if other not in LAYERS:
            wrong.append(f"{module} imports {name}, which is in no layer")
        elif LAYERS.index(other) > LAYERS.index(own):
            wrong.append(f"{module} imports {name}, which comes after it")
        elif {own, other} & {"io"} and {own, other} & set(SCIENCE):
            wrong.append(f"{module} imports {name}: files and science stay apart")
        elif own == "simulate" and any(
            name == avoided or name.startswith(f"{avoided}.") for avoided in SIMULATE_AVOIDS
        ):
            wrong.append(f"{module} imports {name}: scenes share no operator with the search")
    for name in third_party(source):
        if name.split(".")[0] == "joblib" and module != "parallel":
            wrong.append(f"{module} imports joblib; only xcorr.parallel does")
        if name.startswith("matplotlib.pyplot") or name == "pylab":
            wrong.append(f"{module} imports pyplot")
    return wrong


def modules() -> dict[str, Path]:
    """All modules of the package by dotted name below it."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE).with_suffix("").parts
        found[".".join(parts[:-1] if parts[-1] == "__init__" and len(parts) > 1 else parts)] = path
    return found


def test_every_module_has_a_layer():
    assert {layer_of(name) for name in modules() if name != "__init__"} <= set(LAYERS)


@pytest.mark.parametrize("module", modules())
def test_imports_point_one_way(module):
    assert breaches(module, modules()[module].read_text()) == []


@pytest.mark.parametrize(
    ("module", "source"),
    [
        ("errors", "from xcorr.units import LIGHT_KM_S"),
        ("kernels.voigt", "import xcorr.spectral.air"),
        ("search", "def f():\n    from xcorr.pipeline import run"),
        ("search", "from xcorr.io import read_cube"),
        ("io.cubes", "from xcorr import atmosphere"),
        ("io.cubes", "from ..search import find"),
        ("simulate.scene", "from xcorr.spectral.lsf import LsfOperator"),
        ("simulate.scene", "from xcorr.spectral import lsf"),
        ("simulate", "from xcorr.starlight import fit"),
        ("simulate.scene", "from xcorr.columns import template_columns"),
        ("search", "from joblib import Parallel"),
        ("report.figures", "import matplotlib.pyplot as plt"),
        ("report.figures", "from matplotlib import pyplot"),
        ("search", "import xcorr.nowhere"),
    ],
)
def test_the_rule_notices(module, source):
    assert len(breaches(module, source)) >= 1


@pytest.mark.parametrize(
    ("module", "source"),
    [
        (
            "search",
            "from xcorr.errors import XcorrError\nfrom xcorr.psf import make_stamps\nimport numpy as np",
        ),
        ("io.cubes", "from xcorr.cube import Cube\nfrom .overrides import Overrides"),
        ("commands.run", "from xcorr.pipeline import run\nfrom xcorr.io.output import output_directory"),
        (
            "simulate.scene",
            "from xcorr.simulate.image import render\nfrom xcorr.atmosphere import builtin_template",
        ),
    ],
)
def test_the_rule_allows(module, source):
    assert breaches(module, source) == []
