"""What is installed, what the README says, and that the documents match the program."""

import ast
import re
import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path
from typing import get_args

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name
from pydantic import BaseModel

from xcorr import __version__
from xcorr.config import Settings, parse_settings

ROOT = Path(__file__).resolve().parent.parent
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
README = (ROOT / "README.md").read_text()
SHELL_LINES = re.findall(r"^python3 -m venv .*$", README, re.MULTILINE)


def test_readme_opens_with_the_job():
    title, job = README.split("\n\n")[:2]
    assert title == "# xcorr"
    assert job.startswith("`xcorr` says which molecules are in the atmosphere of a faint companion")


def test_readme_has_two_lines_for_a_bare_machine():
    main_job, tests = SHELL_LINES
    assert re.fullmatch(
        r"python3 -m venv (\S+) && \1/bin/pip install -q \. && \1/bin/xcorr simulate --out (\S+)"
        r" && \1/bin/xcorr run \2/run\.toml --out \S+",
        main_job,
    )
    assert tests.endswith(".venv-test/bin/python -m pytest -n 2")
    for name in ("OPENBLAS", "OMP", "NUMBA"):
        assert f"{name}_NUM_THREADS=1 " in tests


def test_ci_runs_the_line_of_the_readme():
    script = (ROOT / ".ci" / "run").read_text()
    pattern = re.search(r"grep -E '(.*pytest)' README.md", script)[1]
    assert [line for line in README.splitlines() if re.search(pattern, line)] == [SHELL_LINES[1]]
    assert 'bash -c "$line"' in script
    assert (ROOT / ".ci" / "run").stat().st_mode & 0o111


def requirements(names):
    return {canonicalize_name(Requirement(text).name) for text in names}


def test_every_import_is_a_declared_dependency():
    declared = requirements(PROJECT["dependencies"])
    found = set()
    for path in (ROOT / "xcorr").rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Import):
                found |= {name.name.split(".")[0] for name in node.names}
            elif isinstance(node, ast.ImportFrom) and not node.level:
                found.add(node.module.split(".")[0])
    outside = {
        canonicalize_name({"erfa": "pyerfa"}.get(name, name))
        for name in found - set(sys.stdlib_module_names) - {"xcorr"}
    }
    # pydantic-core is released with, and pinned by, pydantic
    assert outside - {"pydantic-core"} <= declared


def test_ci_pins_what_the_project_asks_for():
    pins = {}
    for line in (ROOT / ".ci" / "constraints.txt").read_text().splitlines():
        if line and not line.startswith("#"):
            name, version = line.split("==")
            pins[canonicalize_name(name)] = version
    for text in [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["test"]]:
        requirement = Requirement(text)
        assert requirement.specifier.contains(pins[canonicalize_name(requirement.name)]), text


def test_versions_agree():
    assert PROJECT["version"] == __version__
    assert f"## {__version__}" in (ROOT / "docs" / "changelog.md").read_text()


def test_wheel_holds_package_data_and_nothing_else(tmp_path):
    build = [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)]
    done = subprocess.run(build, cwd=ROOT, capture_output=True, text=True, timeout=300)
    assert done.returncode == 0, done.stderr
    (wheel,) = tmp_path.glob("xcorr-*.whl")
    names = zipfile.ZipFile(wheel).namelist()
    tops = {name.split("/")[0] for name in names}
    assert tops == {"xcorr", f"xcorr-{__version__}.dist-info"}
    assert {"xcorr/py.typed", "xcorr/cli.py", "xcorr/_data/templates/README.md"} <= set(names)
    shipped = {
        name.removeprefix("xcorr/_data/") for name in names if name.startswith("xcorr/_data/templates/")
    }
    data = {str(path.relative_to(ROOT)) for path in (ROOT / "templates").glob("*.h5")}
    assert data
    assert data <= shipped
    assert not [name for name in names if name.endswith(".pyc") or "__pycache__" in name]


# ---------------------------------------------------------------- documents

DOCUMENTS = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted((ROOT / "docs").glob("*.md"))]


@pytest.mark.parametrize("path", DOCUMENTS, ids=lambda path: path.name)
def test_run_files_in_documents_are_valid(path):
    for text in re.findall(r"```toml\n(.*?)```", path.read_text(), re.DOTALL):
        assert isinstance(parse_settings(text, base_dir="/data"), Settings)


@pytest.mark.parametrize("path", DOCUMENTS, ids=lambda path: path.name)
def test_links_between_documents_lead_somewhere(path):
    for target in re.findall(r"\]\(([^)#:]+)\)", path.read_text()):
        assert (path.parent / target).exists(), target


def tables(model=Settings):
    """Name and model of every table of the run file."""
    for name, field in model.model_fields.items():
        parts = [field.annotation]
        while parts:
            part = parts.pop()
            if isinstance(part, type) and issubclass(part, BaseModel):
                yield name, part
                break
            parts += get_args(part)


@pytest.mark.parametrize(("table", "model"), list(tables()))
def test_run_file_document_describes_every_key(table, model):
    text = (ROOT / "docs" / "run-file.md").read_text()
    section = re.search(rf"^## `\[+{table}\]+`.*?\n(.*?)(?=^## |\Z)", text, re.MULTILINE | re.DOTALL)[1]
    first_cells = " ".join(re.findall(r"^\| (`[^|]*) \|", section, re.MULTILINE))
    assert set(re.findall(r"`(\w+)`", first_cells)) == set(model.model_fields)
